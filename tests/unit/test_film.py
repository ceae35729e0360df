"""Films of runs: they change nothing, and show what the run says."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import DEMOS, demo
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.simulation import Simulation
from swarmpush.dynamics.states import STATES
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.loading import load
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts
from swarmpush.viewing.film import UNKNOWN, Film, LiveFilm, film_of, point_film, record

ROUNDING = 1e-12  # m or rad: engine units to SI and back


def short(name: str, seconds: float = 4.0) -> Scenario:
    return load(demo(name)).replace(goal={"time_limit": seconds})


def assert_same(one: Run, other: Run) -> None:
    """Two runs are the same to the last bit."""
    for table in ("visits", "block", "pushers", "bumps", "laps"):
        pd.testing.assert_frame_equal(getattr(one, table), getattr(other, table), check_exact=True)
    assert (one.ended, one.travel_m, one.books, one.energy) == (other.ended, other.travel_m, other.books, other.energy)


@pytest.fixture(scope="module")
def passage() -> Scenario:
    return short("service_passage", 30.0)


@pytest.fixture(scope="module")
def planned(passage: Scenario) -> Plan:
    return plan(passage, n_starts=50)


@pytest.fixture(scope="module")
def film(passage: Scenario, planned: Plan) -> Film:
    return record(passage, 3, planned)


@pytest.mark.parametrize("name", DEMOS)
def test_a_watched_run_is_the_run(name: str) -> None:
    """However a run is advanced, with odd pieces and looks in between, it is that of `simulate` bit by bit."""
    s = short(name)
    live = LiveFilm(s, 5, plan(s, n_starts=20))
    for k, to_s in enumerate((0.001, 0.5, 0.5, 0.3, 1.7, 2.0)):
        live.advance(to_s)
        live.frame(to_s / 2)
        live.series()
        live.strikes(0.0, to_s)
        assert not live.is_complete, k
    assert_same(live.finish(), simulate(s, seed=5))


def test_frames_are_the_runs_places(film: Film) -> None:
    """At the times of the run's path a frame has its places; between them a straight line."""
    assert film.run is not None
    block, crew = film.run.block, film.run.pushers
    n = film.scenario.pushers.count
    shown = np.isin(block["t_s"].to_numpy(), film.times_s)
    assert shown.sum() > 100
    for row in np.flatnonzero(shown)[::37]:
        frame = film.frame(float(block["t_s"].iloc[row]))
        here = crew.iloc[row * n : (row + 1) * n]
        place = block.iloc[row][["x_m", "y_m", "yaw_rad"]].to_numpy(float)
        np.testing.assert_allclose(frame.blocks[0], place, atol=ROUNDING)
        np.testing.assert_allclose(frame.pushers[:, :2], here[["x_m", "y_m"]], atol=ROUNDING)
        turned = np.remainder(frame.pushers[:, 2] - here["heading_rad"].to_numpy() + np.pi, 2 * np.pi) - np.pi
        np.testing.assert_allclose(turned, 0.0, atol=1e-9)  # a rad of many turns has fewer digits
    middle = 0.5 * (film.times_s[10] + film.times_s[11])
    expected = 0.5 * (film.pushers[10] + film.pushers[11])
    np.testing.assert_allclose(film.frame(middle).pushers, expected, atol=ROUNDING)
    assert film.frame(-5.0).t_s == 0.0
    assert film.frame(1e9).t_s == film.duration_s


def test_headings_go_the_short_way(film: Film) -> None:
    """From frame to frame no heading turns by more than half a turn, so that none flips between two frames."""
    assert np.abs(np.diff(film.pushers[:, :, 2], axis=0)).max() <= np.pi


def test_strikes_in_a_span(film: Film) -> None:
    """A span holds the strikes that begin in it, and spans side by side hold all."""
    assert film.run is not None
    parts = [film.strikes(a, a + 10.0) for a in (-1.0, 9.0, 19.0, 29.0)]
    together = pd.concat(parts)
    assert len(together) == len(film.run.strikes)
    assert together["t_on_s"].is_monotonic_increasing
    assert sorted(together["impact_Ns"]) == sorted(film.run.strikes["impact_Ns"])


def test_series(film: Film) -> None:
    """Travel ends at the run's; the pushers' impulse ends at the books'."""
    assert film.run is not None
    series = film.series()
    assert series.travel_m[-1] == pytest.approx(film.run.travel_m, abs=ROUNDING)
    assert series.impulse_Ns[-1] == pytest.approx(film.run.books.pushers[0], rel=1e-9)
    assert series.n_leaning.max() <= film.scenario.pushers.count


def test_states_are_known_in_the_end(film: Film, passage: Scenario, planned: Plan) -> None:
    """States wait for the end of the run, since a lap counts only once it is completed; shares add up to the crew."""
    live = LiveFilm(passage, 3, planned)
    live.advance(5.0)
    assert set(live.frame(2.0).states) == {UNKNOWN}
    assert live.state_shares is None
    assert live.spells().empty
    live.finish()
    np.testing.assert_array_equal(live.frame(2.0).states, film.frame(2.0).states)
    shares = live.state_shares
    assert shares is not None
    np.testing.assert_allclose(shares.sum(axis=1), 1.0)
    assert film.run is not None
    mean = np.trapezoid(shares[:, STATES.index("ahead")], film.times_s) / film.duration_s
    assert mean == pytest.approx(film.run.causes["ahead_of_block"], abs=0.02)  # rows of the path tell of spans
    assert live.spells()["t_first_s"].is_monotonic_increasing
    assert len(live.spells()) > 2


def test_live_strikes_come_as_they_happen(passage: Scenario, planned: Plan, film: Film) -> None:
    """While a run is under way the strikes so far are there; a rebound counts as a strike of its own until the end."""
    live = LiveFilm(passage, 3, planned)
    live.advance(15.0)
    so_far = live.strikes(0.0, 14.0)
    final = film.strikes(0.0, 14.0)
    assert set(final["t_on_s"]) <= set(so_far["t_on_s"])
    assert so_far["impact_Ns"].sum() == pytest.approx(final["impact_Ns"].sum(), rel=0.05)


def test_a_budget_ends_a_piece_early(planned: Plan, passage: Scenario) -> None:
    """With no budget left one frame is made and no more."""
    live = LiveFilm(passage, 3, planned)
    before = live.duration_s
    live.advance(1e9, budget_s=0.0)
    assert before < live.duration_s < 1.0


def test_trails(film: Film) -> None:
    """A trail ends where the pusher is and reaches back as far as asked."""
    trail = film.trail(10.0, 2.0)
    assert trail.shape[1:] == (film.scenario.pushers.count, 2)
    first = film.times_s[np.searchsorted(film.times_s, 10.0, side="right") - len(trail)]
    assert first == pytest.approx(8.0, abs=2 * np.diff(film.times_s).max())
    assert len(film.trail(0.0, 5.0)) == 1


def test_a_film_of_a_saved_run(passage: Scenario, film: Film, tmp_path: Path) -> None:
    """A saved run is shown by making it again; what comes out otherwise is refused."""
    simulate(passage, seed=3).save(tmp_path)
    again = film_of(tmp_path)
    assert again.seed == 3
    np.testing.assert_array_equal(again.pushers, film.pushers)
    text = (tmp_path / "run.json").read_text().replace('"duration_s": 30', '"duration_s": 31')
    (tmp_path / "run.json").write_text(text)
    with pytest.raises(ValueError, match="comes out otherwise"):
        film_of(tmp_path)
    with pytest.raises(ValueError, match="does not hold a whole run"):
        film_of(tmp_path / "nowhere")


def test_the_point_world_starts_alike(passage: Scenario, planned: Plan) -> None:
    """Points begin where bodies begin, run at the free speed, stay in the channel, and leave the block where it is."""
    points = point_film(passage, 3, planned)
    np.testing.assert_allclose(points.frame(0.0).pushers[:, :2], draw_starts(passage, 3)[:, :2])
    step = np.diff(points.times_s).mean()
    speeds = np.hypot(*np.moveaxis(np.diff(points.pushers[:, :, :2], axis=0), 2, 0)) / step
    speed = passage.pushers.free_speed
    assert speeds.max() <= speed * (1 + 1e-9)
    assert np.median(speeds) == pytest.approx(speed, rel=1e-6)  # corners within a step cut it short
    r = passage.pushers.radius
    assert points.pushers[:, :, 1].min() >= r - 1e-9
    assert points.pushers[:, :, 1].max() <= passage.channel.width - r + 1e-9
    assert np.ptp(points.blocks, axis=0).max() == 0.0
    assert points.is_complete
    assert points.strikes(0.0, 10.0).empty


def test_a_run_stopped_in_its_midst(passage: Scenario) -> None:
    """A simulation that is not over tells its run so far."""
    simulation = Simulation(passage, seed=3)
    simulation.advance(1000)
    run = simulation.run()
    assert run.ended == "stopped"
    assert run.duration_s == pytest.approx(1000 * simulation.steps.dt_s)
    assert run.books.residual_rel < 1e-9
