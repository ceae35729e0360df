"""What a scenario holds that the point world leaves out, in a sentence each."""

from __future__ import annotations

import math
from collections.abc import Iterator

from swarmpush.kinematics.nudge import slope_pull
from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario


def left_out(s: Scenario) -> tuple[str, ...]:
    """Sentences on what the plan leaves out and the body world takes in; empty where that is only mass and contact.

    >>> import swarmpush
    >>> left_out(swarmpush.load(swarmpush.demo("service_passage")))
    ()
    """
    return (*_of_pushers(s), *_of_blocks(s), *_of_slopes(s))


def _of_pushers(s: Scenario) -> Iterator[str]:
    p, e = s.pushers, s.errors
    if not p.is_disc:
        yield (
            f"the bars are taken for discs of {for_people(p.radius, 'm')} radius, though their corners reach "
            f"{for_people(p.reach, 'm')}"
        )
    if p.heading == "free":
        yield "headings are taken as held, though contacts turn these pushers"
    if e.fade_time is not None:
        yield (
            f"thrust is taken as lasting, though {fade_left(s):.0%} of it is left at the time limit "
            f"({for_people(s.goal.time_limit, 's')})"
        )
    if e.dropout > 0.0:
        yield f"all pushers are taken to last, though {failures_expected(s):.2g} of {p.count} fail in a whole run"


def _of_blocks(s: Scenario) -> Iterator[str]:
    if s.train:
        n = len(s.blocks)
        yield f"strikes are reckoned against the first block alone, though it pushes {n - 1} more; force counts all {n}"
    if any(block.centre_of_mass or block.centre_of_friction for block in s.blocks):
        yield "the block is taken to go straight, though its centre of mass or of friction lies off the middle"


def _of_slopes(s: Scenario) -> Iterator[str]:
    if s.channel.slope != 0.0:
        yield "pushers are taken to run as fast up the slope as down; forces on the block do count it"
    if s.channel.cross_slope != 0.0:
        side = "top" if s.channel.cross_slope < 0.0 else "bottom"
        yield f"pushers are taken to run straight, though the cross slope pulls them and the block to the {side} wall"


def fade_left(s: Scenario) -> float:
    """Share of the thrust that is left at the time limit, exp(-T/fade time); 1 if it does not fade."""
    return math.exp(-s.goal.time_limit / s.errors.fade_time) if s.errors.fade_time else 1.0


def failures_expected(s: Scenario) -> float:
    """Pushers that fail within a run of full length: n (1 - exp(-rate T)), of independent exponential lives."""
    return -s.pushers.count * math.expm1(-s.errors.dropout * s.goal.time_limit)


def climb_share(s: Scenario) -> float:
    """Slope's pull on a pusher over its stall force, m g sin(slope)/F; negative downhill."""
    return slope_pull(s, s.pushers.mass) / s.pushers.stall_force
