"""How many laps a pusher keeps its lap when every turn has a random error."""

from __future__ import annotations

import math

from swarmpush.kinematics.laps import Lap
from swarmpush.scenario import Scenario

DISCRETE_STEP = 0.5825971579390107  # -zeta(1/2)/sqrt(2 pi), see `turns_to_leave`


def turns_to_leave(below: float, above: float, sd: float) -> float:
    """Mean number of turns until a heading that sums up Gaussian errors has left its band.

    E[N] = (a + c sd)(b + c sd)/sd^2 + 1/4 with c = 0.5826: the Brownian exit time from an interval, widened at
    both ends because steps overshoot (Siegmund, "Sequential Analysis", 1985; the constant is
    -zeta(1/2)/sqrt(2 pi)). The 1/4 was found here by solving the integral equation for a centred start; the error
    is below 2e-6 for half-widths of 5 sd or more.

    Arguments:
        below, above: distance from the heading to either end of the band, rad, not negative.
        sd: standard deviation of one turn's error, rad.

    >>> round(turns_to_leave(15.0, 15.0, 1.0), 2)
    243.07
    """
    if sd == 0.0:
        return math.inf
    return (below / sd + DISCRETE_STEP) * (above / sd + DISCRETE_STEP) + 0.25


def laps_to_drift_out(s: Scenario, lap: Lap) -> float:
    """Mean number of laps until heading errors throw a pusher out of a lap; infinite without errors.

    If the heading is neutral, errors add up and `turns_to_leave` applies with the narrowest leg band. If every
    departure renews it, the lap is lost when one departure's error leaves its leg's band: geometric with the
    probability summed over the legs (departures taken as independent, first order in rare losses).
    """
    e = s.errors
    legs = len(lap.surfaces)
    per_turn = e.turn_sd**2 + e.heading_diffusion**2 * lap.time_s / legs
    if lap.is_heading_neutral:
        below = min(-low for low, _ in lap.leg_bands_rad)
        above = min(high for _, high in lap.leg_bands_rad)
        return turns_to_leave(below, above, math.sqrt(per_turn)) / legs
    spreads = [getattr(act, "spread", 0.0) for stage in s.routine.stages for act in stage.acts]
    sd = math.sqrt(per_turn + e.bearing_sd**2 + e.bearing_step**2 / 12.0 + max(spreads) ** 2)
    if sd == 0.0:
        return math.inf
    staying = 1.0
    for low, high in lap.leg_bands_rad:
        staying *= 1.0 - 0.5 * math.erfc(high / (sd * math.sqrt(2.0))) - 0.5 * math.erfc(-low / (sd * math.sqrt(2.0)))
    return 1.0 / (1.0 - staying) if staying < 1.0 else math.inf
