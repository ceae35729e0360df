"""Free pushers that curve and wander: the circle swimmer and the active Brownian particle without thermal motion."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import placed, rig

import swarmpush
from swarmpush.scenario import Scenario

ROOM = 100.0  # m: they start about the middle of it, and run at 1 m/s for some seconds
APART = 0.2  # m between two starts: discs in one place would keep the engine busy with pairs
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000


def in_the_open(
    n: int, time: float, *, lag: float, sideways: float = 1.0, step: float = 1e-3, **errors: float
) -> Scenario:
    """Pushers that start along x at 1 m/s, pass through one another and meet nothing else; `lag` is their m/g."""
    side = math.ceil(math.sqrt(n))
    starts = [(ROOM / 2 + APART * (k % side - side / 2), ROOM / 2 + APART * (k // side - side / 2)) for k in range(n)]
    return rig(
        channel={"length": ROOM, "width": ROOM},
        block={"rear_at": ROOM - 2.0},
        pushers={"count": n, "pass_through": True, "stall_force": 0.1 / lag, "sideways_drag": sideways},
        start=placed(*[(x, y, 0.0) for x, y in starts]),
        goal={"time_limit": time},
        trial={"sample_every": time / 40},
        numerics={"step": step},
        errors=errors,
    )


def positions(run: swarmpush.Run) -> tuple[NDArray[np.float64], NDArray[np.complex128]]:
    """Times, and places as x + i y from each one's start: (samples, pushers).

    A start from rest costs the way of one step, because positions move with the velocity of the step before; times are
    counted from the first motion.
    """
    assert not len(run.visits), "they are to meet nothing"
    table = run.pushers.assign(z=run.pushers["x_m"] + 1j * run.pushers["y_m"])
    places = table.pivot(index="t_s", columns="pusher", values="z")
    return places.index.to_numpy() - run.steps.dt_s, places.to_numpy() - places.to_numpy()[0]


# ---- circles --------------------------------------------------------------------------------------------------------


def circle_of(places: NDArray[np.complex128]) -> tuple[complex, float]:
    """Centre and radius of the circle through places, by linear least squares."""
    x, y = places.real, places.imag
    a, b, c = np.linalg.lstsq(np.column_stack([2 * x, 2 * y, np.ones(len(x))]), x**2 + y**2, rcond=None)[0]
    return complex(a, b), math.sqrt(c + a**2 + b**2)


@pytest.mark.parametrize("drift", [0.7, -3.0, 20.0])
def test_circle_swimmer(drift: float) -> None:
    """A pusher that drifts by omega runs a circle of radius v/omega, and its centre lies to the side it curves to.

    Source: van Teeffelen and Loewen, "Dynamics of a Brownian circle swimmer", Phys. Rev. E 78 (2008) 020101(R).
    """
    lag, turn = 1e-5, 2 * math.pi / abs(drift)
    run = swarmpush.simulate(in_the_open(1, 1.2 * turn, lag=lag, step=1e-4, heading_drift=drift), cycles=())
    centre, radius = circle_of(positions(run)[1][:, 0])
    # a chord for an arc in each step, and the lag of the speed behind the heading: (omega dt)^2/24 and (omega m/g)^2/2
    assert radius == pytest.approx(1 / abs(drift), rel=1e-6)
    assert centre == pytest.approx(1j / drift, abs=2e-4)  # m: what it loses as it starts from rest, and half a step
    heading = np.unwrap(run.pushers["heading_rad"])
    assert heading[-1] - heading[0] == pytest.approx(drift * run.pushers["t_s"].iloc[-1], rel=1e-9)  # rounding


LAG, DRIFT = 0.5, 2.0  # s, rad/s


@pytest.mark.parametrize(("sideways", "tolerance"), [(1.0, 1e-5), (3.0, 1e-3), (0.3, 1e-3)])
def test_circle_with_inertia(sideways: float, tolerance: float) -> None:
    """A curving pusher drifts outwards by its inertia: worked out here from the balance of forces along the heading.

    Along the heading F - g v_p = -m omega v_n and across it -k g v_n = m omega v_p, so with s = omega m/g
    v_p = v0/(1 + s^2/k), v_n = -v_p s/k and the radius is hypot(v_p, v_n)/omega. The drag along the heading is stepped
    exactly, the one across to first order, omega dt/2 of it, unless they are alike.
    """
    s = in_the_open(1, 12 * LAG + math.pi, lag=LAG, sideways=sideways, step=1e-3, heading_drift=DRIFT)
    times, places = positions(swarmpush.simulate(s, cycles=()))
    late = times > 12 * LAG  # exp(-12) of the start is left
    _, radius = circle_of(places[late, 0])
    lag = DRIFT * LAG
    speed = math.hypot(1.0, lag / sideways) / (1 + lag**2 / sideways)
    assert radius == pytest.approx(speed / DRIFT, rel=tolerance)


# ---- wandering ------------------------------------------------------------------------------------------------------

N = 900
SWIMMERS = ((2.0, 0.0, 10.0), (1.5, 0.0, 6.0), (2.0, 3.0, 4.0), (1.5, -2.0, 5.0))  # rad/sqrt(s), rad/s, s
AN_INTERVAL = (
    2e-3  # relative: the heading's walk takes steps of 2 ms, which turn it by (0.09 rad)^2 at most in the mean
)


@pytest.fixture(scope="module", params=SWIMMERS, ids=lambda case: "diffusion {}, drift {}".format(*case))
def school(request: pytest.FixtureRequest) -> swarmpush.Run:
    """Pushers that wander in the open."""
    diffusion, drift, time = request.param
    s = in_the_open(N, time, lag=1e-4, heading_diffusion=diffusion, heading_drift=drift)
    return swarmpush.simulate(s, cycles=())


def decay_of(run: swarmpush.Run) -> complex:
    """D_r - i omega: what the mean heading vector decays and turns with; D_r is half the diffusion squared."""
    return run.scenario.errors.heading_diffusion**2 / 2 - 1j * run.scenario.errors.heading_drift


LOOKED_AT = (1, 2, 5, 10, 20, 40)  # samples


def test_mean_square_displacement(school: swarmpush.Run) -> None:
    """The mean square displacement is 2 v^2 Re[(t - (1 - exp(-c t))/c)/c], c = D_r - i omega.

    Without drift it is 2 v^2 tau^2 (t/tau + exp(-t/tau) - 1), tau = 1/D_r: the active Brownian particle in two
    dimensions less its thermal term. Sources: Howse et al., Phys. Rev. Lett. 99 (2007) 048102 (from memory; written
    there with a tau twice as long); ten Hagen, van Teeffelen and Loewen, J. Phys.: Condens. Matter 23 (2011) 194119.
    The drift was put in here.
    """
    times, places = positions(school)
    c = decay_of(school)
    for k in LOOKED_AT:
        t, squares = times[k], np.abs(places[k]) ** 2
        expected = 2 * ((t - (1 - np.exp(-c * t)) / c) / c).real
        error = FOUR_SIGMA * squares.std() / math.sqrt(N) + AN_INTERVAL * expected
        assert squares.mean() == pytest.approx(expected, abs=error), f"t = {t} s"


def test_mean_path(school: swarmpush.Run) -> None:
    """The mean path is v (1 - exp(-c t))/c in the complex plane: a spiral that closes in, straight without drift.

    Source: van Teeffelen and Loewen, Phys. Rev. E 78 (2008) 020101(R), who name it the spira mirabilis.
    """
    times, places = positions(school)
    c = decay_of(school)
    for k in LOOKED_AT:
        expected = (1 - np.exp(-c * times[k])) / c
        for found, part in ((places[k].real, expected.real), (places[k].imag, expected.imag)):
            error = FOUR_SIGMA * found.std() / math.sqrt(N) + AN_INTERVAL * abs(expected)
            assert found.mean() == pytest.approx(part, abs=error), f"t = {times[k]} s"


def test_effective_diffusion(school: swarmpush.Run) -> None:
    """Late, the mean square displacement grows by 4 D t with D = v^2/2 Re(1/c): v^2 tau/2 without drift."""
    times, places = positions(school)
    c = decay_of(school)
    middle, end = 20, 40
    forgotten = abs(np.exp(-c * times[middle]))
    assert forgotten < 0.1, "the heading by half time"
    growth = np.abs(places[end]) ** 2 - np.abs(places[middle]) ** 2
    span = 4 * (times[end] - times[middle])
    left = 4 * forgotten / abs(c) ** 2 / span  # of the start, at most
    error = FOUR_SIGMA * growth.std() / math.sqrt(N) / span
    assert growth.mean() / span == pytest.approx((1 / c).real / 2, abs=error + left)
