"""What a crew of undisturbed pushers does to the block: strikes one by one, and those who lean at the same time.

Pushers are independent: each leans for the share q of its time, so the number that lean at one moment is binomial.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln, xlog1py, xlogy

from swarmpush.kinematics.nudge import (
    Strike,
    block_drag,
    impact_impulse,
    impact_nudge,
    kinetic_hold,
    slope_pull,
    static_hold,
    strike_nudge,
)
from swarmpush.kinematics.visits import Visits
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]

N_STRIKES = 400  # whose nudge is worked out: the mean is good to a twentieth of their spread
N_HELPED = 100  # the same for each number of others that lean meanwhile
N_TEAMS = 1000  # draws of the pushers that lean together
RAREST = 1e-9  # larger teams than this likely are left out


class CrewPush(NamedTuple):
    """Block speed that the visits to one end give, in m/s, positive into the block, and a share of time.

    impact: slides after impacts (or the given nudge). pushing_on: what single pushers add by pushing on. together: what
    leaning together adds. enough: share of the time in which those who lean overcome the floor's static friction.
    """

    impact: float
    pushing_on: float
    together: float
    enough: float

    @property
    def total(self) -> float:
        return self.impact + self.pushing_on + self.together


def kept_by_walls(s: Scenario, incidence_rad: FloatArray) -> float:
    """Share of momentum and thrust that the side walls leave to the block.

    A pusher that comes in at the angle a drags the block along its face with min(mu, tan a) of its push (Coulomb). If
    all come from one side, the block soon lies against a wall, whose friction mu_w takes that part of the push times
    mu_w; what comes from both sides alike cancels. (Derived here.)

    Arguments:
        incidence_rad: (n,) signed angles of arrival.
    """
    if len(incidence_rad) == 0:
        return 1.0
    normal = np.cos(incidence_rad)
    along = np.clip(np.tan(incidence_rad), -s.contacts.pusher_block.friction, s.contacts.pusher_block.friction)
    one_sided = abs(float((normal * along).mean() / max(float(normal.mean()), 1e-12)))
    return max(0.0, 1.0 - s.contacts.block_wall.friction * one_sided)


def strikes_of(s: Scenario, visits: Visits, most: int = N_STRIKES) -> list[Strike]:
    """The strikes among the visits, at most so many, spread evenly over the list."""
    rows = np.flatnonzero(visits.is_strike)
    rows = rows[:: max(1, len(rows) // most)][:most]
    cosine, force = np.cos(visits.incidence_rad[rows]), s.pushers.stall_force
    turning = np.minimum(visits.turning_s[rows], visits.leaning_s[rows])
    pull = slope_pull(s, s.pushers.mass)
    columns = (
        cosine * s.pushers.free_speed,
        cosine * force - pull,
        visits.leaning_s[rows] - turning,
        visits.turning_cosine[rows] * force * s.pushers.drive_while_turning - pull,
        turning,
        np.full(len(rows), kept_by_walls(s, visits.incidence_rad[visits.is_strike])),
    )
    return [Strike(*row) for row in np.column_stack(columns).tolist()]


def crew_push(s: Scenario, visits: Visits) -> CrewPush:
    """Add up what the crew's visits to one end do, by the scenario's law.

    Leaning: k pushers with the thrusts F_i along the normal move the block at w = max(0, sum F_i - f)/(k g_p + g_b)
    (force balance without inertia), averaged over teams of k of the visits seen, and over the binomial probability
    that k of n lean. On a slope its pull on a pusher is taken off F_i and that on the block is in f. f is what brakes
    the sliding block: the strike by which a team becomes complete has broken the static friction. With law lean nothing
    has, and the sum must exceed what holds the block at rest.

    Strikes: each adds what its nudge is beyond w times its leaning time, averaged over the binomial number j of others
    that lean meanwhile; see `_beyond_leaning`. (Derived here.)
    """
    if len(visits.leaning_s) == 0:
        return CrewPush(0.0, 0.0, 0.0, 0.0)
    strikes, rate = strikes_of(s, visits), s.pushers.count * visits.strike_rate_1_s
    alone = rate * _mean([strike_nudge(s, strike) for strike in strikes])
    if s.forecast.law in ("given", "impact") or math.isinf(alone):
        return CrewPush(alone, 0.0, 0.0, 0.0)
    thrust, chance = _thrusts(s, visits), binomial(s.pushers.count, visits.leaning_share)
    teams = _teams(thrust, visits.leaning_s, max(1, len(chance) - 1))
    speeds = _team_speeds(s, teams)
    enough = float(chance @ (teams > static_hold(s)).mean(axis=0)[: len(chance)])
    total = float(chance @ speeds[: len(chance)])
    if s.forecast.law == "lean":
        single = s.pushers.count * visits.leaning_share * float(speeds[1])
        return CrewPush(0.0, single, total - single, enough)
    for j, likely in enumerate(binomial(s.pushers.count - 1, visits.leaning_share)[: len(speeds) - 1].tolist()):
        some = strikes if j == 0 else strikes[:: max(1, len(strikes) // N_HELPED)]
        total += rate * likely * _beyond_leaning(s, some, j, _average(thrust, visits.leaning_s), speeds)
    impact = rate * _mean([impact_nudge(s, strike.approach_m_s) for strike in strikes])
    return CrewPush(impact, alone - impact, max(total, 0.0) - alone, enough)


def _beyond_leaning(s: Scenario, strikes: list[Strike], others: int, thrust: float, speeds: FloatArray) -> float:
    """Mean way that a strike adds to what it and the others achieve by leaning, m.

    All j + 1 lean for T/(j + 1) of its leaning time T, as what is left of the others' is even over (0, T). If the
    others alone move the block, an impact of impulse J adds J over all drag.
    """
    push = others * thrust
    if others > 0 and push >= kinetic_hold(s):
        drag = block_drag(s) + (others + 1) * s.pushers.drag
        approaches = [(max(0.0, x.approach_m_s - speeds[others]), x.kept) for x in strikes]
        return _mean([kept * impact_impulse(s, float(approach)) / drag for approach, kept in approaches])
    ways = []
    for strike in strikes:
        x = strike._replace(push_s=strike.push_s / (others + 1), turning_s=strike.turning_s / (others + 1))
        way = strike_nudge(s, x, others=others, others_push_N=push)
        ways.append(way - float(speeds[others + 1]) * (x.push_s + x.turning_s))
    return _mean(ways)


def binomial(n: int, share: float) -> FloatArray:
    """Probabilities that 0, 1, 2 ... of n lean at once, up to the largest number that is not out of the question."""
    k = np.arange(n + 1)
    chance = np.exp(gammaln(n + 1) - gammaln(k + 1) - gammaln(n - k + 1) + xlogy(k, share) + xlog1py(n - k, -share))
    return np.asarray(chance[: int(np.flatnonzero(chance > RAREST)[-1]) + 1])


def _thrusts(s: Scenario, visits: Visits) -> FloatArray:
    """Mean thrust of each visit along the normal while it leans, after the walls' part, N."""
    turning = np.minimum(visits.turning_s, visits.leaning_s)
    part = np.divide(turning, visits.leaning_s, out=np.zeros(len(turning)), where=visits.leaning_s > 0.0)
    away = visits.turning_cosine * s.pushers.drive_while_turning
    cosine: FloatArray = (1.0 - part) * np.cos(visits.incidence_rad) + part * away
    thrust = cosine * s.pushers.stall_force - slope_pull(s, s.pushers.mass)
    return thrust * kept_by_walls(s, visits.incidence_rad[visits.is_strike])


def _teams(thrust: FloatArray, weight: FloatArray, most: int) -> FloatArray:
    """(N_TEAMS, most + 1) thrusts of 0, 1, ... `most` pushers together, drawn from those seen by how long they lean."""
    team = np.zeros((N_TEAMS, most + 1))
    if weight.any():
        drawn = np.random.default_rng(0).choice(thrust, (N_TEAMS, most), p=weight / weight.sum())
        team[:, 1:] = drawn.cumsum(axis=1)
    return team


def _team_speeds(s: Scenario, team: FloatArray) -> FloatArray:
    """(k + 1,) mean speed of the block under 0, 1, ... k leaning pushers, m/s."""
    friction = kinetic_hold(s)
    threshold = static_hold(s) if s.forecast.law == "lean" else friction
    net = np.where(team > threshold, team - friction, 0.0).mean(axis=0)
    speeds: FloatArray = np.zeros(len(net))
    speeds[1:] = net[1:] / (np.arange(1, len(net)) * s.pushers.drag + block_drag(s))
    return speeds


def _average(values: FloatArray, weights: FloatArray) -> float:
    return float(np.average(values, weights=weights)) if weights.any() else 0.0


def _mean(values: list[float]) -> float:
    return float(np.mean(values)) if values else 0.0
