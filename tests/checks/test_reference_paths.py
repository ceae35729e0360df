"""Whole motions along a line against a solver from outside: SciPy's event-driven integrator."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import PUSH_ON, G, dry, pair, placed, rig
from scipy.integrate import solve_ivp

import swarmpush
from swarmpush.dynamics.steps import choose_step
from swarmpush.scenario import Scenario

MU = 0.3


def ram(stall_force: float, mass: float, restitution: float) -> Scenario:
    """A cart that starts at rest, rams the middle of a block on a dry floor, and drives on for good."""
    return rig(
        pushers={"stall_force": stall_force, "mass": mass, "latency": PUSH_ON},
        floor=dry(MU),
        contacts={"pusher_block": pair(restitution)},
        start=placed((3.0, 0.5, 0.0)),
        goal={"time_limit": 2.5},
        trial={"sample_every": 0.01},
    )


# ---- SciPy's events -------------------------------------------------------------------------------------------------


class Hit(NamedTuple):
    """One impact of the reference: time, block's rear face, closing speed, impulse; SI."""

    t: float
    face: float
    closing: float
    impulse: float


class Reference(NamedTuple):
    """Impacts, and samples (t, pusher x, face x)."""

    hits: list[Hit]
    path: NDArray[np.float64]


REST = 1e-7  # m/s: a rebound slower than this is taken for staying in touch


def reference(s: Scenario, end: float) -> Reference:
    """Integrate m dv = F - g v for the pusher, M dv = -mu M g for the sliding block, with impacts as events.

    The pusher is too weak to move the block by leaning, so once impacts have died down both stand still.
    """
    p, e = s.pushers, s.contacts.pusher_block.restitution
    m, big = p.mass, s.block.mass
    assert s.start.placed is not None
    state = np.array([s.start.placed[0].x, 0.0, s.block.rear_at, 0.0])
    t, hits, path = 0.0, [], [np.array([[0.0, state[0], state[2]]])]

    def touches(t: float, z: NDArray[np.float64]) -> float:
        return float(z[2] - p.radius - z[0])

    def stops(t: float, z: NDArray[np.float64]) -> float:
        return float(z[3])

    for event in (touches, stops):
        event.terminal, event.direction = True, -1  # type: ignore[attr-defined]
    while t < end:
        slows = MU * G if state[3] > 0.0 else 0.0

        def rates(t: float, z: NDArray[np.float64], slows: float = slows) -> list[float]:
            return [z[1], (p.stall_force - p.drag * z[1]) / m, z[3], -slows]

        piece = solve_ivp(
            rates,
            (t, end),
            state,
            events=[touches, stops] if slows else [touches],
            rtol=1e-10,
            atol=1e-13,
            max_step=0.01,
        )
        path.append(np.column_stack([piece.t, piece.y[0], piece.y[2]]))
        t, state = float(piece.t[-1]), piece.y[:, -1].copy()
        if piece.t_events[0].size:
            closing = state[1] - state[3]
            impulse = (1 + e) * closing * m * big / (m + big)
            hits.append(Hit(t, float(state[2]), float(closing), float(impulse)))
            state[1] -= impulse / m
            state[3] += impulse / big
            if e * closing < REST:
                break
        elif slows and piece.t_events[1].size:
            state[3] = 0.0
    rest = np.array([[end, state[2] - p.radius, state[2]]])
    return Reference(hits, np.vstack([*path, rest]))


N_HITS = 4  # the fifth follows within 40 ms, and what went before has added up
# How far things may be off, over the step. A contact is seen up to a step late, and later still after each slide that
# began late; speeds then differ by the decelerations (F/m = 5 m/s2, mu g = 3 m/s2), places by the speeds.
STEPS_LATE = 8.0
CART_OFF = 3.0  # m/s
BLOCK_OFF = 1.0  # m/s
SPEED_OFF = 10.0  # m/s2
IMPULSE_OFF = 1.8  # kg m/s2: (1 + e) m M/(m + M) of the same


@pytest.mark.parametrize("halvings", [0, 1, 2])
def test_impacts_and_slides_against_events(halvings: int) -> None:
    """Repeated impacts meet event-driven integration to the first order in the step: when, where and how hard."""
    s = ram(0.5, 0.1, 0.8)
    steps = choose_step(s)
    for _ in range(halvings):
        steps = steps.halved()
    run = swarmpush.simulate(s, cycles=(), steps=steps)
    expected = reference(s, 2.5)
    dt = steps.dt_s
    for (_, visit), hit in zip(run.visits.head(N_HITS).iterrows(), expected.hits, strict=False):
        assert visit["t_on_s"] == pytest.approx(hit.t, abs=STEPS_LATE * dt)
        assert visit["x_m"] == pytest.approx(hit.face - s.pushers.radius, abs=CART_OFF * dt)
        assert visit["approach_m_s"] == pytest.approx(hit.closing, abs=SPEED_OFF * dt)
        assert visit["impact_Ns"] == pytest.approx(hit.impulse, abs=IMPULSE_OFF * dt)
    t, pusher, face = expected.path.T
    off = run.pushers["x_m"] - np.interp(run.pushers["t_s"], t, pusher)
    assert off.abs().max() < CART_OFF * dt
    off = run.block["x_m"] - s.block.length / 2 - np.interp(run.block["t_s"], t, face)
    assert off.abs().max() < BLOCK_OFF * dt


def test_gaining_speed() -> None:
    """A pusher gains speed as v0 (1 - exp(-t/tau)) and lies where its integral says (linear drag, closed form)."""
    s = ram(0.5, 0.1, 0.8)
    run = swarmpush.simulate(s.replace(goal={"time_limit": 1.0}), cycles=())
    t, tau = run.pushers["t_s"], s.pushers.relaxation_time
    place = 3.0 + (t - tau * (1 - np.exp(-t / tau)))
    # positions move with the velocity of the step before, so they lag by half a step of the speed gained
    assert (run.pushers["x_m"] - place).abs().max() < 0.6 * run.steps.dt_s
    assert len(run.visits) == len(run.bumps) == 0
