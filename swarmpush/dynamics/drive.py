"""What drives the pushers of a space of the user's own."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True)
class Drive:
    """What drives a pusher, in SI units; the keys mean what they mean in a scenario's table `pushers`.

    stall_force: push at standstill, N. free_speed: at which it is used up, m/s. sideways_drag: drag across the heading
    over drag along it. turn_drag: needed with a free heading, N m s. turn_rate: rad/s; infinite only for discs.
    bump_threshold: N s. bumper_arc: rad. latency: s.

    Raises:
        ValueError: when a value is out of its range.
    """

    stall_force: float
    free_speed: float
    sideways_drag: float = 1.0
    heading: Literal["held", "free"] = "held"
    turn_drag: float = 0.0
    contact_arm: float = 0.0
    turn_rate: float = math.inf
    drive_while_turning: float = 0.0
    bump_threshold: float = 0.0
    bumper_arc: float = 2 * math.pi
    latency: float = 0.0

    def __post_init__(self) -> None:
        for name in ("stall_force", "free_speed", "sideways_drag"):
            if not 0.0 < getattr(self, name) < math.inf:
                raise ValueError(f"{name} = {getattr(self, name)}; it must be more than 0 and finite")
        for name in ("turn_drag", "bump_threshold", "latency"):
            if not 0.0 <= getattr(self, name) < math.inf:
                raise ValueError(f"{name} = {getattr(self, name)}; it must be 0 or more and finite")
        if not math.isfinite(self.contact_arm):
            raise ValueError(f"contact_arm = {self.contact_arm}; it must be finite")
        if not self.turn_rate > 0.0:
            raise ValueError(f"turn_rate = {self.turn_rate}; it must be more than 0")
        if not 0.0 <= self.drive_while_turning <= 1.0:
            raise ValueError(f"drive_while_turning = {self.drive_while_turning}; it must be from 0 to 1")
        if not 0.0 < self.bumper_arc <= 2 * math.pi:
            raise ValueError(f"bumper_arc = {self.bumper_arc}; it must be more than 0 and at most 2 pi")
        if self.heading not in ("held", "free"):
            raise ValueError(f"heading = {self.heading!r}; it must be 'held' or 'free'")
        if self.heading == "free" and not (self.turn_drag > 0.0 and math.isfinite(self.turn_rate)):
            raise ValueError("a free heading needs a turn_drag and a finite turn_rate")
