"""Invented rigs that keep all that a plan takes for granted, but for exactly one thing."""

from __future__ import annotations

import math
from functools import cache

import pandas as pd

from swarmpush.auditing import claims
from swarmpush.auditing.audit import replicate_seeds
from swarmpush.auditing.verdicts import Finding, find_verdicts
from swarmpush.demos import demo
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.loading import load
from swarmpush.scenario import Errors, Pair, Scenario

N_RUNS = 6  # per audit
SECONDS = 150.0  # some thirty laps: the way to the first one must not count


def ideal() -> Scenario:
    """One cart without errors that feels every touch and turns at once, behind a block on a rail.

    The floor stops the block within a millimetre. Walls do not brake it, as the plan takes it to lie against one.
    """
    s = load(demo("service_passage"))
    walls = {"block_wall": Pair(restitution=0.1, friction=0.0)}
    s = s.model_copy(update={"errors": Errors(), "contacts": s.contacts.model_copy(update=walls)})
    return s.replace(
        channel={"length": 1.0},
        pushers={"count": 1, "turn_rate": math.inf, "latency": 0.0, "bump_threshold": 0.0, "bumper_arc": 2 * math.pi},
        block={"yaw": "held", "rear_at": 0.45},
        floor={"static_friction": 0.5, "kinetic_friction": 0.5},
        goal={"travel": 0.5, "time_limit": SECONDS},
    )


def leaning() -> Scenario:
    """The ideal rig with a cart that presses on for 50 ms, with more force than the floor holds."""
    floor = {"static_friction": 0.15, "kinetic_friction": 0.15}
    return ideal().replace(floor=floor, pushers={"latency": 0.05})


def off_centre() -> Scenario:
    """The ideal rig with a short and narrow block, on a rail, that is struck near its edge."""
    floor = {"static_friction": 0.1, "kinetic_friction": 0.1}
    return ideal().replace(floor=floor, block={"width": 0.2, "length": 0.1, "offset": 0.03})


def gliding() -> Scenario:
    """The ideal rig with a heavier block that glides on for some two seconds of a lap of five."""
    floor = {"static_friction": 3e-4, "kinetic_friction": 3e-4}
    return ideal().replace(floor=floor, block={"mass": 5.0})


SOUND = {"ideal": ideal(), "leaning": leaning(), "off centre": off_centre()}

# by the condition that fails
FAULTY = {
    claims.UNDISTURBED: ideal().replace(pushers={"count": 6}),
    claims.INSTANT_TURNS: ideal().replace(pushers={"turn_rate": 1.0}),
    claims.NO_YAW: off_centre().replace(block={"yaw": "free"}),
    claims.AT_REST: gliding(),
    claims.IN_BAND: ideal().replace(errors={"turn_sd": math.radians(30.0)}),
    claims.FORCE: leaning().replace(errors={"fade_time": 80.0}),
}


@cache
def planned(name: str) -> Plan:
    return plan((SOUND | FAULTY)[name], n_starts=300)


def findings(name: str, case: int, n_runs: int = N_RUNS) -> tuple[Finding, ...]:
    """The verdicts on one rig, from runs with the seeds of this case."""
    p = planned(name)
    cycles = tuple(lap.surfaces for lap in p.laps)
    runs = [simulate(p.scenario, seed=seed, cycles=cycles) for seed in replicate_seeds(case, n_runs)]
    return find_verdicts(p, pd.DataFrame([run.summary(p.main_lap) for run in runs]))
