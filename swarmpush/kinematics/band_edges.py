"""What bounds a lap: what happens to a pusher whose heading errs by just more than the lap bears."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from swarmpush.kinematics.bounce import FATE_WORDS, Fate, Settled, settle
from swarmpush.kinematics.laps import BUDGET, IN_THE_OPEN, Lap
from swarmpush.kinematics.legs import SLIDE, leg_from
from swarmpush.kinematics.settling import FloatArray, IntArray, Rig, Seen, cycle_of, first_hit, trace_seen
from swarmpush.program import EXACT, PC, STAGE_SINCE, Contact

BEYOND = 1e-6  # rad; ten times what the search for a band's ends leaves open
CLOSE = 1e-6  # what is left of an error when a lap counts as closed
ANY_HEADING, NO_ERROR = "keeps any heading", "bears no error"
NO_PULL, OTHER_LAP, UNDECIDED = "stops attracting", "falls into another lap", "comes to no lap"


def band_edges(rig: Rig, lap: Lap, seen: Seen) -> tuple[str, str]:
    """Why errors of heading to either side can be no larger, each taken at the leg that bears least.

    Arguments:
        rig: the point world. lap: one of its laps. seen: the same lap as a start was seen in it.

    Returns:
        low, high: "hits NAME" with the surface, a corner perhaps, that is met in place of the lap's next one; `NO_PULL`
            when beyond the edge the lap repels, or attracts too slowly to close; else what becomes of the pusher.
    """
    departures = _departures(rig, lap, seen)
    ends = []
    for side, sense in ((0, -1.0), (1, 1.0)):
        borne = [abs(band[side]) for band in lap.leg_bands_rad]
        # errors that stay for ever are borne alike by all legs; the one in which another surface comes first tells why
        legs = [leg for leg, most in enumerate(borne) if most <= min(borne) + BEYOND]
        words = [_beyond(rig, lap, seen, leg, departures[leg], sense * (borne[leg] + BEYOND)) for leg in legs]
        ends.append(next((word for word in words if word.startswith("hits")), words[0]))
    return ends[0], ends[1]


class _Departure(NamedTuple):
    """A pusher on the lap that has turned and is about to move: heading, the bump it comes from, what it remembers."""

    x: float
    y: float
    heading: float
    contact: int
    normal_angle: float
    memory: IntArray
    notes: FloatArray


def _departures(rig: Rig, lap: Lap, seen: Seen) -> list[_Departure]:
    """One for each leg of the lap, found by going once round it as it was seen."""
    rear = rig.boundary.segments[rig.boundary.rear]
    x, y = (rear[:2] + seen.state[0] * rear[2:4]).tolist()
    at = _Departure(
        x, y, float(seen.state[1]), int(Contact.BLOCK), float(rear[7]), seen.memory.copy(), seen.notes.copy()
    )
    minds = []
    for _ in lap.surfaces:
        leg = leg_from(rig.boundary, rig.program, EXACT, rig.keys, rig.speed, at.memory, at.notes, *at[:5])
        minds.append((at.contact, at.normal_angle, at.memory.copy(), at.notes.copy()))
        contact = at.contact if leg.command == SLIDE else int(Contact.NONE)
        if leg.surface >= 0:
            contact = int(rig.boundary.kinds[leg.surface])
        at.notes[STAGE_SINCE] -= leg.time
        x, y = at.x + leg.run * leg.ux, at.y + leg.run * leg.uy
        at = at._replace(x=x, y=y, heading=leg.heading, contact=contact, normal_angle=leg.normal_angle)
    shift = first_hit(trace_seen(rig, seen)[2]) - first_hit(lap.surfaces)
    departures = []
    for k, (x, y, _, heading) in enumerate(lap.hits.tolist()):
        contact, normal_angle, memory, notes = minds[(k + shift) % len(minds)]
        memory[PC] -= 1  # the move is still to be made
        departures.append(_Departure(x, y, heading, contact, normal_angle, memory, notes))
    return departures


def _beyond(rig: Rig, lap: Lap, seen: Seen, leg: int, departure: _Departure, error: float) -> str:
    """What becomes of a pusher that sets out on a leg of the lap with this error of heading."""
    if abs(error) >= math.pi:
        return ANY_HEADING
    if lap.leg_bands_rad[leg] == (0.0, 0.0):
        return NO_ERROR
    x, y, heading, contact, normal_angle, memory, notes = departure
    heading += error
    met = leg_from(
        rig.boundary, rig.program, EXACT, rig.keys, rig.speed,
        memory.copy(), notes.copy(), x, y, heading, contact, normal_angle,
    ).surface  # fmt: skip
    name = rig.names[met] if met >= 0 else IN_THE_OPEN
    if name != lap.surfaces[(leg + 1) % len(lap.surfaces)]:
        return f"hits {name}"

    def go_on(budget: int) -> tuple[Settled, IntArray, FloatArray]:
        after, noted = memory.copy(), notes.copy()
        end = settle(
            rig.boundary, rig.program, EXACT, rig.keys, rig.speed,
            x, y, heading, after, noted, contact, normal_angle, budget,
        )  # fmt: skip
        return end, after, noted

    end, _, _ = go_on(2 * BUDGET)
    if end.fate == Fate.LOCKED:
        return NO_PULL if end.signature == seen.signature else OTHER_LAP
    arrival, after, noted = go_on(len(lap.surfaces) - leg)  # the lap's last leg leads to the rear face
    state = np.array([arrival.along, arrival.heading])
    trace, _, surfaces = trace_seen(rig, Seen(seen.signature, seen.n_rear, state, after, noted))
    if cycle_of(surfaces) == cycle_of(lap.surfaces) and abs(trace.aa) ** (2 * BUDGET / len(surfaces)) > CLOSE:
        return NO_PULL
    return FATE_WORDS.get(Fate(end.fate), UNDECIDED)
