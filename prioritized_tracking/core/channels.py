# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
"""
Reference channels, and where each of them is at a controller time.

"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

from prioritized_tracking.core.references import JointHold, PoseHold
from prioritized_tracking.core.references.path_time import Progress
from prioritized_tracking.core.smooth import smoothstep

Hold: TypeAlias = PoseHold | JointHold
Samples: TypeAlias = Mapping[str, Any]
"""One `PoseSample` or `JointSample` for each channel, by name."""

#: Time over which a path's rate changes in the middle of a path, and over which pushes ramp, s.
RAMP = 0.5


@dataclass(frozen=True, kw_only=True, eq=False)
class Channel:
    """
    A reference: what moves, in which frame, and when it starts.

    Attributes
    ----------
    path : pose or joint path, or a hold; None: holds where the arm is at activation.
    kind : "pose" or "joints".
    base : frame a pose lives in.
    leader : channel whose path time this one takes; its own name if it leads.
    pace : path seconds per second.
    at_activation : starts by itself.

    """

    path: Any
    kind: str
    base: str
    leader: str
    pace: float = 1.0
    at_activation: bool = False


class References:
    """
    All channels of a controller, and their progress along their paths.

    Parameters
    ----------
    channels : by name.

    """

    def __init__(self, channels: Mapping[str, Channel]) -> None:
        self.channels = dict(channels)
        self._paths = {name: channel.path for name, channel in self.channels.items()}
        self._progress: dict[str, Progress] = {}
        self._push = (0.0, 0.0, 0.0)  # ramp of the push: from, to, since
        self.active = False

    @property
    def duration(self) -> float:
        """
        Time the longest path takes at its pace, s; inf for endless ones, 0 for holds.

        """
        times = [c.path.duration / self.channels[c.leader].pace for c in self.channels.values() if c.path]
        return max(times, default=0.0)

    def activate(self, t: float, hold_here: Callable[[str, Channel], Hold]) -> None:
        """
        Put every path at its beginning, at rest; channels without a path get the hold that is made for them.

        """
        for name, channel in self.channels.items():
            self._paths[name] = channel.path or hold_here(name, channel)
        self._progress = {
            name: Progress.at_rest(t) for name, channel in self.channels.items() if channel.leader == name
        }
        self._push = (0.0, 0.0, t)
        self.active = True

    def deactivate(self) -> None:
        """
        Forget where holds were made.

        """
        self._paths = {name: channel.path for name, channel in self.channels.items()}
        self.active = False

    def start(self, t: float, *, only_at_activation: bool = False) -> None:
        """
        Begin, or go on. A path at its beginning is at rest and sets out at once; else its rate ramps up.

        """
        for name, progress in self._progress.items():
            channel = self.channels[name]
            if only_at_activation and not channel.at_activation:
                continue
            s = progress.at(t)[0]
            if s <= 0.0:
                self._progress[name] = Progress(t, s, channel.pace, 0.0, channel.pace)
            else:
                self._progress[name] = progress.toward(t, channel.pace, RAMP)
        self._push = (self.push_scale(t), 1.0, t)

    def hold(self, t: float) -> None:
        """
        Brake along every path and hold there.

        """
        for name, progress in self._progress.items():
            self._progress[name] = progress.toward(t, 0.0, RAMP)
        self._push = (self.push_scale(t), 0.0, t)

    def push_scale(self, t: float) -> float:
        """
        Ramp of the steady push at controller time t, 0 … 1: only while tracking.

        """
        before, after, since = self._push
        return before + (after - before) * smoothstep((t - since) / RAMP)

    def at(self, t: float) -> Samples:
        """
        Sample every channel at controller time t, followers at their leader's path time.

        """
        times = {name: progress.at(t) for name, progress in self._progress.items()}
        return {name: self._paths[name].sample(*times[c.leader]) for name, c in self.channels.items()}

    def at_path_time(self, s: float, hold_here: Callable[[str, Channel], Hold]) -> Samples:
        """
        Sample every channel at path time s and full pace; unset holds are made for the occasion.

        """
        return {
            name: (self._paths[name] or hold_here(name, channel)).sample(s, 1.0, 0.0)
            for name, channel in self.channels.items()
        }
