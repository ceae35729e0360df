"""Further blocks ahead of the first: momentum that is passed on, friction that adds up, and the books of both."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from rigs import FAINT, PUSH_ON, G, dry, pair, placed, rig

import swarmpush
from swarmpush.loading import from_tables
from swarmpush.scenario import Scenario

STATIC, KINETIC, MASS = 0.35, 0.30, 1.0
SIDE = 0.2  # m


def train(masses: list[float], *, gap: float = 0.0, yaw: str = "free", **tables: Any) -> Scenario:
    """Square blocks one ahead of the other with gaps in between; the pusher comes from behind, on the middle line."""
    blocks = [
        {"length": SIDE, "width": SIDE, "mass": mass, "rear_at": 2.0 + k * (SIDE + gap), "yaw": yaw}
        for k, mass in enumerate(masses)
    ]
    plain = rig(block=blocks[0], **tables)
    return from_tables(plain.to_tables() | {"train": blocks[1:]})


# ---- impacts --------------------------------------------------------------------------------------------------------


def passed_on(e: float, masses: list[float]) -> swarmpush.Run:
    """A pusher hits the first of a row of blocks that stand apart, without anything that resists them."""
    return swarmpush.simulate(
        train(
            masses, gap=0.2, fluid=FAINT, start=placed((1.5, 0.5, 0.0)),
            contacts={"pusher_block": pair(1.0), "block_block": pair(e)},
            pushers={"mass": 1.0, "stall_force": 1.0}, goal={"travel": 3.0, "time_limit": 6.0},
        ),
        cycles=(),
    )  # fmt: skip


HITS = 1e-6  # relative: FAINT takes 1e-9 of a speed per second
PAIRS = [(1.0, [1.0, 1.0, 1.0]), (0.5, [1.0, 1.0, 1.0]), (0.3, [1.0, 0.5, 2.0])]


@pytest.mark.parametrize(("e", "masses"), PAIRS)
def test_momentum_passes_along_a_row(e: float, masses: list[float]) -> None:
    """Each hit of a row passes on (1 + e) m1 m2/(m1 + m2) times the approach (textbook: Newton's law of restitution).

    The first meetings only; a block that goes on behind the one it has hit can meet it again.
    """
    run = passed_on(e, masses)
    hits = run.visits[run.visits["pusher"] == -1].drop_duplicates("surface")
    assert list(hits["surface"]) == ["block 2", "block 3"]
    speed = run.visits[["impact_Ns", "lean_Ns"]].iloc[0].sum() / masses[0]
    for m1, m2, (_, hit) in zip(masses, masses[1:], hits.iterrows(), strict=False):
        reduced = m1 * m2 / (m1 + m2)
        assert hit["approach_m_s"] == pytest.approx(speed, rel=HITS)
        assert hit["speed_m_s"] == pytest.approx(speed, rel=HITS)
        assert hit["impact_Ns"] == pytest.approx((1 + e) * reduced * speed, rel=HITS)
        assert hit["energy_lost_J"] == pytest.approx((1 - e**2) * reduced * speed**2 / 2, rel=HITS, abs=1e-9)
        speed = hit["impact_Ns"] / m2


def test_books_of_a_row() -> None:
    """What the first block gives to the next stands in its books; equal elastic blocks give all they have got."""
    run = passed_on(1.0, [1.0, 1.0, 1.0])
    books = run.books
    assert books.blocks[0] == pytest.approx(-books.pushers[0], rel=HITS)
    assert abs(books.change[0]) < 1e-9 * books.pushers[0]
    last = run.block["x_3_m"].diff().iloc[-1] / run.block["t_s"].diff().iloc[-1]
    assert last == pytest.approx(books.pushers[0] / MASS, rel=1e-6)  # a difference of places


# ---- friction -------------------------------------------------------------------------------------------------------


def leaning(share: float, n: int, floor: dict[str, float], **tables: Any) -> Scenario:
    """A row of n blocks that stand in touch, and a pusher that leans with a share of n times the static friction."""
    force = share * n * floor["static_friction"] * MASS * G
    return train(
        [MASS] * n, floor=floor, start=placed((2.0 - 0.02, 0.5, 0.0)),
        pushers={"stall_force": force, "latency": PUSH_ON}, **{"goal": {"travel": 3.0, "time_limit": 1.0}} | tables,
    )  # fmt: skip


STICKY = {"static_friction": STATIC, "kinetic_friction": KINETIC}


@pytest.mark.parametrize("n", [2, 3, 4])
@pytest.mark.parametrize(("share", "moves"), [(0.97, False), (1.03, True)])
def test_a_row_needs_as_much_as_all_its_blocks(n: int, share: float, moves: bool) -> None:
    """A row of n blocks lets go at n times the friction of one (force balance)."""
    travel = swarmpush.simulate(leaning(share, n, dry(STATIC)), cycles=()).travel_m
    if moves:
        assert travel > 1e-3
    else:
        assert travel < 1e-4  # the solver's rest lets the row settle by a tenth of a millimetre at most


@pytest.mark.parametrize("n", [2, 3, 4])
def test_a_row_holds_with_static_friction(n: int) -> None:
    """With a solver that iterates long enough a row at rest holds up to n times the static friction."""
    s = leaning(0.95, n, STICKY, numerics={"iterations": 10 * n**2})
    assert abs(swarmpush.simulate(s, cycles=()).travel_m) < 1e-7


def test_a_row_holds_with_default_iterations() -> None:
    """A row of four at rest holds up to four times the static friction with the default settings as well."""
    assert abs(swarmpush.simulate(leaning(0.95, 4, STICKY), cycles=()).travel_m) < 1e-7


@pytest.mark.parametrize("n", [2, 4])
def test_speed_of_a_row(n: int) -> None:
    """A row slides at (F - n mu_k M g)/g in the end, and each contact carries the friction of those ahead of it."""
    s = leaning(1.2, n, STICKY, goal={"travel": 3.0, "time_limit": 3.0})
    run = swarmpush.simulate(s, cycles=())
    speed = (1.2 * STATIC - KINETIC) * n * MASS * G / s.pushers.drag
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(speed, rel=1e-3)  # 10 relaxation times or more
    books = run.books
    forward = n * KINETIC * MASS * G * run.duration_s + n * MASS * run.block["vx_m_s"].iloc[-1]
    assert books.pushers[0] == pytest.approx(forward, rel=2e-3)  # in the first steps the blocks stick
    assert -books.blocks[0] / books.pushers[0] == pytest.approx((n - 1) / n, rel=2e-3)
    assert books.residual_rel < 1e-9


def test_a_row_in_liquid() -> None:
    """A row of n leaning blocks goes at F/(g + n g_b) in a liquid (force balance)."""
    n, force, drag = 3, 1.0, 0.7
    s = train(
        [MASS / 10] * n, fluid={"block_drag": drag, "block_yaw_drag": 1.0}, start=placed((1.98, 0.5, 0.0)), yaw="held",
        pushers={"stall_force": force, "latency": PUSH_ON, "mass": 0.01}, goal={"travel": 3.0, "time_limit": 4.0},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(force / (force + n * drag), rel=1e-6)
    end = run.block.iloc[-1]
    assert np.diff([end["x_m"], end["x_2_m"], end["x_3_m"]]) == pytest.approx([SIDE, SIDE], abs=2 * run.steps.slop_m)
    assert math.isclose(end["yaw_2_rad"], 0.0)
