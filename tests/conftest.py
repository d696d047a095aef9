# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
What every test runs under: one thread for linear algebra (matrices are small), and fixed examples.

"""

import os

for variable in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(variable, "1")  # before numpy is imported

from hypothesis import settings  # noqa: E402

# the same examples in every run, and no deadline: a busy machine is no failure
settings.register_profile("fixed", derandomize=True, deadline=None)
settings.load_profile("fixed")
