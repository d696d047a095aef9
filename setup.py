# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Packaging for pip and for colcon (ament_python).

"""

from glob import glob

from setuptools import find_packages, setup

NAME = "prioritized_tracking"
SHARE = f"share/{NAME}"
# where `ros2 run` looks for executables; for colcon, pip makes its own from the entry points
EXECUTABLES = f"$base/lib/{NAME}"

setup(
    name=NAME,
    version="0.1.0",
    description="Torque control of robot arms along tool paths, through singularities, by a list of tasks",
    author="The prioritized_tracking contributors",
    maintainer="The prioritized_tracking contributors",
    maintainer_email="maintainers@prioritized-tracking.invalid",
    license="Apache-2.0",
    python_requires=">=3.10",
    packages=find_packages(include=[NAME, f"{NAME}.*"]),
    package_data={NAME: ["py.typed"]},
    data_files=[
        # the marker by which ROS finds the package: an empty file of the package's name
        ("share/ament_index/resource_index/packages", [f"config/ament_index/{NAME}"]),
        (SHARE, ["package.xml"]),
        (f"{SHARE}/config", sorted(glob("config/*.csv") + glob("config/*.urdf") + glob("config/*.yaml"))),
        (f"{SHARE}/launch", sorted(glob("launch/*.launch.py"))),
    ],
    zip_safe=False,
    install_requires=["numpy>=1.24", "scipy>=1.10", "pin>=3.0", "pyyaml>=6.0", "tqdm>=4.60"],
    extras_require={
        # the nodes without a ROS installation; with one, package.xml brings the same
        "ros": [
            f"ros-jazzy-{name}"
            for name in (
                "rclpy",
                "rmw-fastrtps-cpp",
                "diagnostic-msgs",
                "geometry-msgs",
                "sensor-msgs",
                "std-msgs",
                "std-srvs",
                "trajectory-msgs",
                "visualization-msgs",
            )
        ],
        "fast": ["numba>=0.59"],
        "report": ["matplotlib>=3.7", "rosbags>=0.10"],
        "test": [
            "example-robot-data>=4.0",
            "hypothesis>=6.90",
            "mujoco>=3.1",
            "mypy==2.4.1",
            "pytest>=8.0",
            "ruff==0.17.6",
            "types-PyYAML",
        ],
    },
    entry_points={
        "console_scripts": ["prioritized-tracking = prioritized_tracking.cli:main"],
        "prioritized_tracking.charts": [
            "position = prioritized_tracking.charts.position:Position",
            "rotation_vector = prioritized_tracking.charts.rotation:RotationVector",
            "euler = prioritized_tracking.charts.rotation:Euler",
            "plane = prioritized_tracking.charts.surface:Plane",
            "cylinder = prioritized_tracking.charts.surface:Cylinder",
            "cylindrical = prioritized_tracking.charts.cylindrical:Cylindrical",
            "posture = prioritized_tracking.charts.joints:Posture",
            "joints = prioritized_tracking.charts.joints:Joints",
        ],
    },
    options={"develop": {"script_dir": EXECUTABLES}, "install": {"install_scripts": EXECUTABLES}},
)
