"""Which laps the geometry gives: closed bounce cycles through the block's rear face, and which starts reach them."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import FATE_WORDS, Fate, LapTrace, settle, settle_many, trace_lap
from swarmpush.kinematics.boundary import REAR, Boundary, boundary_of, surface_names
from swarmpush.kinematics.legs import SLIDE, Leg, leg_from
from swarmpush.program import EXACT, MEMORY, NOTES, PC, STAGE_SINCE, Contact, Program, compile_routine
from swarmpush.routine import Depart, Routine, Wander
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

N_STARTS = 4000  # puts the 95 % interval of a share within 0.016
BUDGET = 600  # bumps; a lap that contracts by 0.9 a round closes to one part in a million within 400
MAX_LAP_BUMPS = 256
IN_THE_OPEN = "in the open"  # where a leg of given length ends
_SCAN_STEP = math.radians(0.25)
_NEUTRAL = 1e-9  # a multiplier this close to 1 in size is 1: Newton's method leaves errors of 1e-12


@dataclass(frozen=True)
class Lap:
    """One closed bounce cycle.

    surfaces: names in order, from the rear face. hits: (n, 4) x, y in m, arriving and departing heading in rad.
    n_rear: bumps on the rear face per lap. length_m, time_s: of one lap. multipliers: eigenvalues of the return
    map on (position, heading) at the rear face, larger first; inside (-1, 1) the lap attracts, at 1 it is neutral.
    rear_y_m, rear_heading_rad: arrival at the rear face. leg_bands_rad: for each leg, from the departure at
    `hits`, the errors of heading (low, high) after which the next bump is still the lap's and the pusher falls
    back to a lap of the same bumps. share: of all starts that end in this lap.
    """

    surfaces: tuple[str, ...]
    hits: FloatArray
    n_rear: int
    length_m: float
    time_s: float
    multipliers: tuple[complex, ...]
    rear_y_m: float
    rear_heading_rad: float
    leg_bands_rad: tuple[tuple[float, float], ...]
    share: float

    @property
    def band_rad(self) -> tuple[float, float]:
        """Headings on the leg to the rear face that keep the lap."""
        low, high = self.leg_bands_rad[-1]
        return self.rear_heading_rad + low, self.rear_heading_rad + high

    @property
    def is_heading_neutral(self) -> bool:
        """Whether a heading error stays for ever, so that errors add up lap by lap."""
        return any(abs(abs(m) - 1.0) < _NEUTRAL for m in self.multipliers)

    @property
    def strike_cosines(self) -> FloatArray:
        """Cosine of the angle between heading and rear normal at each bump on the rear face of the lap."""
        at_rear = [k for k, name in enumerate(self.surfaces) if name == REAR]
        # row 0 departs from the rear face; its arrival is the last row's, by closure
        arriving = [self.rear_heading_rad if k == 0 else self.hits[k - 1, 2] for k in at_rear]
        return np.cos(np.array(arriving, dtype=np.float64))


@dataclass(frozen=True)
class Capture:
    """What becomes of the starts: shares that add up to 1."""

    captured: float
    lost: dict[str, float]
    undecided: float
    n_starts: int


def find_laps(s: Scenario, *, n_starts: int = N_STARTS, seed: int = 0) -> tuple[tuple[Lap, ...], Capture]:
    """Find the laps that the scenario's starts fall into, without any error, the block standing still.

    A departure with a spread is taken at its mean angle. A routine that draws sides or directions by chance has no
    laps, whatever it may happen to repeat; nor is it a lap what repels the pushers that come close to it.

    Arguments:
        s: the scenario. n_starts: starts drawn from its start region. seed: of those draws.

    Returns:
        The laps, most frequent first, and what becomes of the starts.
    """
    boundary, names = boundary_of(s), surface_names(s)
    program = compile_routine(_without_spread(s.routine), names)
    many = s.replace(pushers={"count": n_starts}, start={"placed": None})
    starts = np.array(draw_starts(s, seed)) if s.start.placed else draw_starts(many, seed, apart=False)
    n = len(starts)
    keys = stream_keys(seed, 1)[0]
    fates, states = np.zeros((n, 3), dtype=np.int64), np.zeros((n, 2))
    memories = np.zeros((n, MEMORY), dtype=np.int64)
    settle_many(boundary, program, EXACT, keys, s.pushers.free_speed, starts, BUDGET, fates, states, memories)

    if _goes_by_chance(s.routine):
        fates[fates[:, 0] == Fate.LOCKED, 0] = Fate.UNDECIDED
    tracer = _Tracer(boundary, names, program, keys, s.pushers.free_speed)
    laps: list[Lap] = []
    locked = fates[:, 0] == Fate.LOCKED
    signatures, first, counts = np.unique(fates[locked, 2], return_index=True, return_counts=True)
    for k in np.argsort(-counts):
        i = np.flatnonzero(locked)[first[k]]
        lap = tracer.lap(starts[i], int(fates[i, 1]), int(signatures[k]), counts[k] / n)
        if lap is not None:
            laps.append(lap)
        else:
            fates[locked & (fates[:, 2] == signatures[k]), 0] = Fate.UNDECIDED
    locked = fates[:, 0] == Fate.LOCKED
    lost = {word: float(np.mean(fates[:, 0] == fate)) for fate, word in FATE_WORDS.items()}
    capture = Capture(
        captured=float(locked.mean()),
        lost={word: share for word, share in lost.items() if share > 0},
        undecided=float(np.mean(fates[:, 0] == Fate.UNDECIDED)),
        n_starts=n,
    )
    return tuple(laps), capture


def _goes_by_chance(routine: Routine) -> bool:
    acts = [act for stage in routine.stages for act in stage.acts]
    return any(isinstance(act, Wander) or (isinstance(act, Depart) and act.side == "either") for act in acts)


def _without_spread(routine: Routine) -> Routine:
    stages = [
        stage.model_copy(
            update={
                "acts": tuple(a.model_copy(update={"spread": 0.0}) if isinstance(a, Depart) else a for a in stage.acts)
            }
        )
        for stage in routine.stages
    ]
    return routine.model_copy(update={"stages": tuple(stages)})


class _Mind(NamedTuple):
    """What a pusher knows: its memory and its notes, the clock being 0. Compiled code changes only copies."""

    memory: IntArray
    notes: FloatArray

    def copy(self) -> _Mind:
        return _Mind(self.memory.copy(), self.notes.copy())


class _Moment(NamedTuple):
    """A pusher where its routine is to decide: place, heading, and the bump it is to react to."""

    x: float
    y: float
    heading: float
    contact: int
    normal_angle: float


class _Tracer:
    """Laps of one rig: polishing, multipliers, bands. A state is a place along the rear face and the heading there."""

    def __init__(
        self, boundary: Boundary, names: tuple[str, ...], program: Program, keys: NDArray[np.uint64], speed: float
    ) -> None:
        self._boundary, self._names, self._program, self._keys, self._speed = boundary, names, program, keys, speed
        self._rear = boundary.segments[boundary.rear]

    def trace(self, state: FloatArray, mind: _Mind, n_rear: int) -> tuple[LapTrace, FloatArray, IntArray]:
        hits, surfaces = np.zeros((MAX_LAP_BUMPS, 4)), np.zeros(MAX_LAP_BUMPS, dtype=np.int64)
        lap = trace_lap(
            self._boundary, self._program, EXACT, self._keys, self._speed,
            state[0], state[1], *mind.copy(), n_rear, hits, surfaces,
        )  # fmt: skip
        return lap, hits[: lap.n_bumps], surfaces[: lap.n_bumps]

    def lap(self, start: FloatArray, n_rear: int, signature: int, share: float) -> Lap | None:
        """The lap that a start was seen to end in; None if it does not close after all, or repels."""
        mind = _Mind(np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES))
        x, y, heading = start
        state = self._settle(_Moment(x, y, heading, int(Contact.NONE), heading + math.pi), mind, BUDGET, signature)
        polished = None if state is None else self._polish(state, mind, n_rear)
        if polished is None:
            return None
        largest = max(map(abs, _multipliers(self.trace(polished, mind, n_rear)[0])))
        if largest > 1.0 + _NEUTRAL:
            return None
        if largest > 1.0 - _NEUTRAL:
            polished = self._centred(polished, mind, n_rear, signature)
        trace, hits, surfaces = self.trace(polished, mind, n_rear)
        x, y = self._place(polished[0])
        rows = np.vstack([[x, y, polished[1], hits[0, 2]], hits[:-1]])
        rows[:, 2:] = np.remainder(rows[:, 2:] + math.pi, 2 * math.pi) - math.pi
        return Lap(
            surfaces=(REAR, *(self._names[k] if k >= 0 else IN_THE_OPEN for k in surfaces[:-1])),
            hits=rows,
            n_rear=n_rear,
            length_m=trace.length,
            time_s=trace.time,
            multipliers=_multipliers(trace),
            rear_y_m=float(y),
            rear_heading_rad=float(rows[0, 2]),
            leg_bands_rad=tuple(self._leg_bands(polished, mind, n_rear, signature)),
            share=float(share),
        )

    def _place(self, along: float) -> tuple[float, float]:
        """The point of the rear face's surface at a length from its beginning."""
        return float(self._rear[0] + along * self._rear[2]), float(self._rear[1] + along * self._rear[3])

    def _at_rear(self, state: FloatArray) -> _Moment:
        return _Moment(*self._place(state[0]), float(state[1]), int(Contact.BLOCK), float(self._rear[7]))

    def _centred(self, state: FloatArray, mind: _Mind, n_rear: int, signature: int) -> FloatArray:
        """Of a family of laps, one for each heading, the one in the middle of the band."""
        *_, (low, high) = self._leg_bands(state, mind, n_rear, signature)
        turned = state + np.array([0.0, (low + high) / 2])
        end = self._settle(self._at_rear(turned), mind.copy(), 2 * BUDGET, signature)
        polished = self._polish(end, mind, n_rear) if end is not None else None
        return state if polished is None else polished

    def _polish(self, state: FloatArray, mind: _Mind, n_rear: int) -> FloatArray | None:
        """Newton's method on the return map; a neutral direction is left where it is (least-squares step)."""
        state = state.copy()
        for _ in range(20):
            lap, _, _ = self.trace(state, mind, n_rear)
            if lap.n_bumps == 0:
                return None
            residual = np.array([lap.along - state[0], math.remainder(lap.heading - state[1], 2 * math.pi)])
            if abs(residual[0]) < 1e-13 * self._boundary.size and abs(residual[1]) < 1e-13:
                break
            jacobian = np.array([[lap.aa, lap.ah], [lap.ha, lap.hh]]) - np.eye(2)
            state -= np.linalg.lstsq(jacobian, residual, rcond=1e-9)[0]
        lap, _, _ = self.trace(state, mind, n_rear)
        closed = abs(lap.along - state[0]) < 1e-9 * self._boundary.size
        closed &= abs(math.remainder(lap.heading - state[1], 2 * math.pi)) < 1e-9
        return state if lap.n_bumps and closed else None

    def _settle(self, moment: _Moment, mind: _Mind, budget: int, signature: int) -> FloatArray | None:
        """The state in which a pusher ends up, its mind changed in place; None if it is another lap, or none."""
        x, y, heading, contact, normal_angle = moment
        end = settle(
            self._boundary, self._program, EXACT, self._keys, self._speed,
            x, y, heading, *mind, contact, normal_angle, budget,
        )  # fmt: skip
        same = end.fate == Fate.LOCKED and end.signature == signature
        return np.array([end.along, end.heading]) if same else None

    def _leg(self, moment: _Moment, mind: _Mind) -> Leg:
        """The next leg, the mind changed in place."""
        x, y, heading, contact, normal_angle = moment
        return leg_from(
            self._boundary, self._program, EXACT, self._keys, self._speed, *mind, x, y, heading, contact, normal_angle
        )

    def _leg_bands(self, state: FloatArray, mind: _Mind, n_rear: int, signature: int) -> Iterator[tuple[float, float]]:
        """For each leg of the lap, the errors of heading that keep it."""
        lap, _, _ = self.trace(state, mind, n_rear)
        moment, mind = self._at_rear(state), mind.copy()
        for _ in range(lap.n_bumps):
            leg = self._leg(moment, mind)
            moment = moment._replace(heading=leg.heading)
            moving = mind.copy()
            moving.memory[PC] -= 1  # the turns are done, the move is still to be made

            def keeps(error: float, moment=moment, moving=moving, surface=leg.surface) -> bool:  # type: ignore[no-untyped-def]
                off, after = moment._replace(heading=moment.heading + error), moving.copy()
                if self._leg(off, moving.copy()).surface != surface:
                    return False
                end = self._settle(off, after, 2 * BUDGET, signature)
                if end is None:
                    return False
                trace, _, _ = self.trace(end, after, n_rear)
                return trace.n_bumps > 0 and abs(trace.aa) < 1.0 + _NEUTRAL

            if keeps(0.0):
                yield -_edge(lambda a, keeps=keeps: keeps(-a)), _edge(keeps)  # type: ignore[misc]
            else:
                yield 0.0, 0.0
            moment = self._after(moment, leg)
            mind.notes[STAGE_SINCE] -= leg.time

    def _after(self, moment: _Moment, leg: Leg) -> _Moment:
        """Where the routine decides next, after a leg that began at a moment."""
        contact = int(Contact.NONE) if leg.command != SLIDE else moment.contact
        if leg.surface >= 0:
            contact = int(self._boundary.kinds[leg.surface])
        return _Moment(moment.x + leg.run * leg.ux, moment.y + leg.run * leg.uy, leg.heading, contact, leg.normal_angle)


def _edge(holds: Callable[[float], bool]) -> float:
    """Largest angle up to which `holds` is true without a break, to 1e-7 rad."""
    low = 0.0
    while low < math.pi and holds(low + _SCAN_STEP):
        low += _SCAN_STEP
    high = low + _SCAN_STEP
    while high - low > 1e-7:
        middle = (low + high) / 2
        if holds(middle):
            low = middle
        else:
            high = middle
    return low


def _multipliers(lap: LapTrace) -> tuple[complex, ...]:
    values = np.linalg.eigvals(np.array([[lap.aa, lap.ah], [lap.ha, lap.hh]]))
    ordered = sorted(values.tolist(), key=abs, reverse=True)
    return tuple(complex(v) for v in ordered)
