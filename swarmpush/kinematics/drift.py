"""How many laps a pusher keeps its lap when every turn has a random error: theory of first passage."""

from __future__ import annotations

import math
import operator
from itertools import accumulate

from swarmpush.kinematics.laps import Lap
from swarmpush.scenario import Errors, Scenario

DISCRETE_STEP = 0.5825971579390107  # -zeta(1/2)/sqrt(2 pi), see `turns_to_leave`
_FAINT = 1e-6  # a bias that adds less than this much to the exponents of the biased formula is none


def turns_to_leave(below: float, above: float, sd: float, bias: float = 0.0) -> float:
    """Mean number of turns until a heading that sums up Gaussian errors has left its band.

    Without bias E[N] = (a + c sd)(b + c sd)/sd^2 + 1/4 with c = 0.5826: the Brownian exit time from an interval,
    widened at both ends because steps overshoot (Siegmund, "Sequential Analysis", 1985; the constant is
    -zeta(1/2)/sqrt(2 pi)). The 1/4 was found here by solving the integral equation for a centred start; the error
    is below 2e-6 for half-widths of 5 sd or more.

    With a steady bias d, from Wald's identities for the same widened interval A, B:
    E[N] = [(A + B)(1 - exp(-2 d A/sd^2))/(1 - exp(-2 d (A + B)/sd^2)) - A]/d, which for a centred start is
    (H/d) tanh(H d/sd^2). Without random errors turn floor(b/d) + 1 is the first beyond the end.

    Arguments:
        below, above: distance from the heading to either end of the band, rad, not negative.
        sd: standard deviation of one turn's error, rad. bias: its mean, rad, positive towards `above`.

    >>> round(turns_to_leave(15.0, 15.0, 1.0), 2)
    243.07
    >>> round(turns_to_leave(15.0, 15.0, 1.0, 0.1), 2)
    142.6
    """
    if bias < 0.0:
        below, above, bias = above, below, -bias
    if sd == 0.0:
        return math.floor(above / bias) + 1.0 if bias > 0.0 else math.inf
    low, high = below + DISCRETE_STEP * sd, above + DISCRETE_STEP * sd
    pull = 2.0 * bias / sd**2
    if pull * (low + high) < _FAINT:
        return low * high / sd**2 + 0.25
    return ((low + high) * math.expm1(-pull * low) / math.expm1(-pull * (low + high)) - low) / bias


def bias_per_turn(e: Errors, lap: Lap) -> float:
    """Steady error of one departure in a lap, rad: the turn's bias and what a curved path adds on a mean leg.

    A leg of the time t that curves by w t arrives turned by w t, which adds up where headings are kept. Where they are
    renewed only the place of arrival counts, and the chord is off by w t/2.
    """
    curve = e.heading_drift * lap.time_s / len(lap.surfaces)
    return e.turn_bias + (curve if lap.is_heading_neutral else curve / 2.0)


def wander_per_leg(e: Errors, lap: Lap) -> float:
    """Standard deviation by which a wandering heading turns a mean leg of a lap, rad.

    After the time t a heading of diffusion s is off by s sqrt(t), which adds up where headings are kept. Where they are
    renewed the chord counts, whose direction is the heading's mean over the leg: s sqrt(t/3). (Derived here: the
    variance of the mean of a Brownian path.)
    """
    time = lap.time_s / len(lap.surfaces)
    return e.heading_diffusion * math.sqrt(time if lap.is_heading_neutral else time / 3.0)


def laps_to_drift_out(s: Scenario, lap: Lap) -> float:
    """Mean number of laps until errors throw a pusher out of a lap; infinite without errors.

    If the heading is neutral, errors add up and `turns_to_leave` applies with the narrowest leg band. If every
    departure renews it, the lap is lost when one departure's error leaves its leg's band: a first leg without error,
    then legs one by one, each kept with its own probability p (departures taken as independent):
    E = [1 + (p_1 + p_1 p_2 + ... + P)/(1 - P)]/n with P the product over the n legs of a lap, which is 1/(1 - P) for
    rare losses. (Derived here. A bearing read in steps counts as an error of step/sqrt(12).)
    """
    e = s.errors
    legs, bias = len(lap.surfaces), bias_per_turn(e, lap)
    sd = math.hypot(e.turn_sd, wander_per_leg(e, lap))
    if lap.is_heading_neutral:
        below = min(-low for low, _ in lap.leg_bands_rad)
        above = min(high for _, high in lap.leg_bands_rad)
        return turns_to_leave(below, above, sd, bias) / legs
    spreads = [getattr(act, "spread", 0.0) for stage in s.routine.stages for act in stage.acts]
    sd = math.hypot(sd, e.bearing_sd, e.bearing_step / math.sqrt(12.0), max(spreads))
    if sd == 0.0 and bias == 0.0:
        return math.inf
    bands = lap.leg_bands_rad[1:] + lap.leg_bands_rad[:1]
    kept = list(accumulate((_inside(low - bias, high - bias, sd) for low, high in bands), operator.mul))
    return (1.0 + sum(kept) / (1.0 - kept[-1])) / legs if kept[-1] < 1.0 else math.inf


def _inside(low: float, high: float, sd: float) -> float:
    """Probability that a normal deviate lies between two ends."""
    if sd == 0.0:
        return float(low < 0.0 < high)
    return 1.0 - 0.5 * math.erfc(high / (sd * math.sqrt(2.0))) - 0.5 * math.erfc(-low / (sd * math.sqrt(2.0)))
