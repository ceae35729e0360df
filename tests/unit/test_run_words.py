"""A run in words, rows and pictures: complete, sorted, and adding up."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import Any, cast

import matplotlib.pyplot as plt
import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.states import STATES
from swarmpush.dynamics.world import simulate
from swarmpush.geometry import channel_corners
from swarmpush.kinematics.forecast import push_force
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.reporting.drawing import pusher_shape
from swarmpush.reporting.page import page
from swarmpush.reporting.palette import PALE, STATE_COLOURS
from swarmpush.reporting.run_drawing import end_of_run, leaning, pushers_needed, states
from swarmpush.reporting.run_words import (
    cause_rows,
    energy_parts,
    energy_rows,
    main_reason,
    run_answer,
    state_rows,
    state_shares,
)
from swarmpush.reporting.wording import AT_THE_BLOCK, CAUSES, REASONS, STATE_WORDS, TELLS_LITTLE
from swarmpush.viewing.film import film_of_path
from swarmpush.viewing.marks import Polygon
from swarmpush.viewing.scene import BLOCK, CREW, scene, whole

ROUNDING = 1e-9
LEFT_OUT = 1e-5  # of the largest part: eleven parts of up to a millionth are not listed


@pytest.fixture(scope="module")
def run() -> Run:
    """A short run with bars, two blocks and a slope."""
    s = load(demo("bristle_tray")).replace(goal={"time_limit": 12.0}, errors={"dropout": 0.05})
    return simulate(s, seed=2, cycles=())


def failed(ended: str = "time", **shares: float) -> Run:
    """What the words need of a run of 100 s with these causes; each sets in at 12 s."""
    rows = [{"cause": name, "share": shares.get(name, 0.0), "t_first_s": 12.0} for name in CAUSES]
    return cast(Run, SimpleNamespace(ended=ended, duration_s=100.0, failures=pd.DataFrame(rows)))


def test_every_cause_and_state_has_words(run: Run) -> None:
    """The words are those of the causes and states that a run can have."""
    assert set(run.failures["cause"]) == set(CAUSES) == set(REASONS)
    assert set(STATE_WORDS) == set(STATES)
    assert set(AT_THE_BLOCK) | set(TELLS_LITTLE) <= set(CAUSES)


@pytest.mark.parametrize(
    ("shares", "words"),
    [
        ({"touching_pusher": 0.38}, "38% of the crew's time in touch with one another, from 12 s on"),
        ({"touching_pusher": 0.38, "in_no_lap": 0.9, "turning": 0.5}, "in touch with one another"),
        ({"touching_pusher": 0.38, "ahead_of_block": 0.4}, "40% of the crew's time ahead of the block"),
        ({"touching_pusher": 0.8, "block_jammed_between_walls": 0.3}, "in 30% of the time both walls held the block"),
        ({"touching_pusher": 0.8, "block_jammed_between_walls": 0.2}, "in touch with one another"),
        ({"touching_pusher": 0.01, "in_no_lap": 0.9}, "90% of the crew's time behind the block and in no lap"),
        ({"touching_pusher": 0.01}, "too few or too weak"),
    ],
)
def test_the_main_reason(shares: dict[str, float], words: str) -> None:
    """What stands between thrust and motion comes first, then the largest share, then what tells little."""
    assert words in main_reason(failed(**shares))


def test_the_reason_for_breaking_off() -> None:
    """A run that broke off has that as its reason."""
    assert main_reason(failed("the motion ran away", touching_pusher=0.5)) == (
        "the run broke off because the motion ran away"
    )


def test_the_answer(run: Run) -> None:
    """The answer says first whether the block arrived, and has a reason only if it did not."""
    assert not run.has_arrived
    assert run_answer(run).startswith("Did not arrive: the block covered ")
    assert main_reason(run) in run_answer(run)
    short = simulate(run.scenario.replace(goal={"travel": 1e-4}), seed=2, cycles=())
    assert run_answer(short).startswith("Arrived: the block covered ")
    assert ";" not in run_answer(short)


def test_rows_of_causes(run: Run) -> None:
    """Only causes that occurred are listed, the largest share first."""
    rows = cause_rows(run)
    table = run.failures[run.failures["share"] > 0.0].sort_values("share", ascending=False)
    assert [row["name"] for row in rows] == [CAUSES[cause] for cause in table["cause"]]
    assert 0 < len(rows) < len(CAUSES)


def test_the_energy_account_adds_up(run: Run) -> None:
    """What went in less what was taken and kept is nothing, and the residual stands last."""
    parts = energy_parts(run)
    assert sum(value for _, value in parts) == pytest.approx(0.0, abs=LEFT_OUT * run.energy.drive)
    assert {"the drives' thrust", "gravity along the slope", "contacts, block with block"} <= dict(parts).keys()
    assert [name for name, _ in energy_rows(run)] == [*dict(parts), "what does not balance"]


def test_shares_of_states_add_up(run: Run) -> None:
    """At every moment the states share the whole crew among them, and the rows name those that occurred."""
    shares = state_shares(run)
    assert shares.sum(axis=1).to_numpy() == pytest.approx(1.0, abs=ROUNDING)
    assert len(state_rows(run)) == int((shares > 0.0).any().sum())


def test_the_page_tells_all_of_it(run: Run) -> None:
    """Answer, causes, states, energy and books about the centres stand in the page."""
    text = page(run).replace("&#39;", "'")
    for words in (
        run_answer(run),
        *(row["name"] for row in cause_rows(run)),
        *(name for name, _ in (*state_rows(run), *energy_rows(run))),
        "residual about the centres",
        "The plan leaves out:",
    ):
        assert words in text


# ---- pictures -----------------------------------------------------------------------------------------------------


def test_shape_of_a_bar() -> None:
    """A bar of 44 mm x 15 mm along its heading; turned by a right angle it stands across."""
    p = load(demo("bristle_tray")).pushers
    for heading, size in ((0.0, (0.044, 0.015)), (math.pi / 2, (0.015, 0.044))):
        outline = pusher_shape(p, heading)
        assert np.ptp(outline, axis=0) == pytest.approx(size, abs=ROUNDING)
    disc = load(demo("service_passage")).pushers
    assert np.hypot(*pusher_shape(disc, 1.0).T) == pytest.approx(disc.radius, abs=ROUNDING)


def test_bodies_at_the_end_lie_apart(run: Run) -> None:
    """The picture has both blocks and all pushers at their last places, and none lies in another."""
    from shapely import Polygon as Area

    planned = plan(run.scenario, n_starts=20)
    film = film_of_path(run, planned)
    marks = scene(film, film.duration_s, whole(run.scenario, 1600, 900))
    fills = {PALE, *STATE_COLOURS.values()}
    shapes = [mark for mark in marks if isinstance(mark, Polygon) and mark.fill in fills and mark.z in (BLOCK, CREW)]
    bodies = [Area(shape.points) for shape in shapes if len(shape.points) in (4, len(shapes[-1].points))]
    assert len(bodies) == 2 + run.scenario.pushers.count
    overlap = max(a.intersection(b).area for k, a in enumerate(bodies) for b in bodies[:k])
    assert overlap < 0.02 * min(body.area for body in bodies)
    walls = whole(run.scenario, 1600, 900).points(channel_corners(run.scenario))
    assert all(Area(walls).buffer(0.5).contains(body) for body in bodies)
    figure = end_of_run(run, planned)
    assert len(figure.axes[0].patches) >= len(bodies)


def test_pushers_needed_as_thrust_fades(run: Run) -> None:
    """At first as many as the plan says; with e-fold fading exp(t/T) times as many, and more on a rising table."""
    s = run.scenario
    level = cast(Run, SimpleNamespace(scenario=s.replace(channel={"slope": 0.0})))
    t = np.array([0.0, 300.0])
    first, later = pushers_needed(level, t)
    assert first == pytest.approx(push_force(level.scenario).pushers_to_move, rel=ROUNDING)
    assert later == pytest.approx(math.e * first, rel=ROUNDING)
    uphill = pushers_needed(run, t)
    assert uphill[1] / uphill[0] > math.e


def test_pictures_of_leaning_and_states(run: Run) -> None:
    """Leaning shows the threshold's line from the plan's number on; the states fill the picture to 100 %."""
    figure: Any = leaning(run)
    lines = {line.get_label(): line for line in figure.axes[0].lines}
    assert lines["needed to move the blocks"].get_ydata()[0] == pytest.approx(push_force(run.scenario).pushers_to_move)
    plt.close(figure)
    figure = states(run)
    tops = [path.vertices[:, 1].max() for kind in figure.axes[0].collections for path in kind.get_paths()]
    plt.close(figure)
    assert max(tops) == pytest.approx(100.0)
