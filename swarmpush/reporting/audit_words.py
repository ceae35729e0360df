"""An audit in sentences, shared by the console, the page and notebooks."""

from __future__ import annotations

import math

from swarmpush.auditing.audit import MOSTLY, Audit
from swarmpush.auditing.neighbours import untried_crews
from swarmpush.auditing.statistics import Estimate
from swarmpush.demos import DEMOS, demo
from swarmpush.dynamics.run import Run
from swarmpush.kinematics.forecast import push_force
from swarmpush.quantities import for_people
from swarmpush.reporting.wording import arrived, interval, number, share_of
from swarmpush.scenario import Scenario

N_COSTS = 3  # told in words
N_FIRST = 3  # values to measure first that are named in words


def cost_sentences(audit: Audit) -> list[str]:
    """The largest costs in block speed, a sentence each, the largest first."""
    promise = audit.plan.travel.block_speed_m_s
    costs = [(rung.adds, rung.cost_m_s) for rung in audit.ladder if rung.cost_m_s and rung.cost_m_s.mean < 0.0]
    told = []
    for adds, cost in sorted(costs, key=lambda entry: entry[1].mean)[:N_COSTS]:
        span = interval(Estimate(-cost.mean, -cost.high, -cost.low, cost.n), "m/s")
        share = _of_promise(-cost.mean / promise) if 0.0 < promise < math.inf else ""
        chance = "; chance alone could explain it" if cost.high >= 0.0 else ""
        name = adds[:1].upper() + adds[1:]
        told.append(f"{name}: {number(-cost.mean, 'm/s')} slower ({span}){share}{chance}.")
    return told


def _of_promise(share: float) -> str:
    return f", {share:.0f} times the planned speed" if share >= 10.0 else f", {share_of(share)} of the planned speed"


def compared_words(audit: Audit) -> str:
    """With which rung each one is compared, in a sentence."""
    pairs = zip(audit.ladder[1:], audit.ladder, strict=False)
    others = [rung.adds for rung, above in pairs if rung.against != above.rung]
    own = f"; for {' and '.join(others)} it is the one to geometry" if others else ""
    return (
        "Each rung makes one more thing real, with the same random numbers; its cost is the paired difference to the "
        f"rung above it{own}."
    )


def baseline_words(audit: Audit) -> str:
    """The crew that bounces at random beside the scenario as given and the plan, in two sentences."""
    random, given = audit.baseline.block_speed_m_s, audit.ladder[-1].block_speed_m_s
    lead = audit.baseline.lead_m_s
    chance = "" if lead.low > 0.0 or lead.high < 0.0 else ", which may be chance"
    return (
        f"The same crew bouncing at random: {number(random.mean, 'm/s')} ({interval(random, 'm/s')}), arrived in "
        f"{arrived(audit.baseline.arrival)} runs; as given {number(given.mean, 'm/s')}, {arrived(audit.arrival)}; "
        f"planned {number(audit.plan.travel.block_speed_m_s, 'm/s')}. The routine's lead is "
        f"{number(lead.mean, 'm/s')} ({interval(lead, 'm/s')}){chance}."
    )


def arrival_words(audit: Audit) -> str:
    """Whether the crew as given arrives sooner than at random, in one sentence."""
    test = audit.sooner_than_random
    if math.isnan(test.p_value):
        return "Too few runs arrive, as given and with the same crew bouncing at random, to compare their times."
    sooner = "sooner" if test.z > 0.0 else "later"
    chance = f"log-rank test, p = {test.p_value:.2g}"
    if test.p_value > 1.0 - audit.confidence:
        return f"Whether the crew as given arrives sooner than the same crew bouncing at random is open ({chance})."
    return f"The crew as given arrives {sooner} than the same crew bouncing at random ({chance})."


def bench_words(audit: Audit) -> str:
    """How many runs on a bench would settle the claim, in one sentence."""
    n = audit.bench_runs
    if n is None:
        return "Arrival is as likely as not, and no number of runs on a bench would tell which."
    runs = "1 run" if n == 1 else f"{n} runs"
    return f"If arrivals are as frequent on a bench, some {runs} there would show whether more than half arrive."


def crew_words(audit: Audit) -> str:
    """The useful range of the crew size, in sentences; empty where no other crew was tried."""
    if not audit.crews:
        return ""
    sizes, s = audit.crews, audit.scenario
    tried = f"{sizes[0].count} to {sizes[-1].count} pushers"
    useful = [size.count for size in sizes if size.arrival.low > MOSTLY]
    best = max(sizes, key=lambda size: size.block_speed_m_s.mean)
    if useful:
        names = ", ".join(map(str, useful))
        lead = f"Of crews of {tried}, {names} arrive in most runs (whole {audit.percent} interval above half)"
    else:
        lead = f"No crew tried, of {tried}, has its whole {audit.percent} interval of arrivals above half"
    speed = f"{number(best.block_speed_m_s.mean, 'm/s')} ({interval(best.block_speed_m_s, 'm/s')})"
    text = f"{lead}. The block is fastest with {best.count}: {speed}"
    larger = [size for size in sizes if size.count > best.count]
    if crowded := [size for size in larger if size.gain_m_s and size.gain_m_s.high < 0.0]:
        text += f"; with {crowded[0].count} crowding costs more than further pushers add"
    elif not larger:
        text += ", the largest crew tried"
    if missing := untried_crews(s):
        text += f"; {missing[0]} find no room to start"
    needed = push_force(s).pushers_to_move
    if 1.0 < needed < math.inf:
        text += f". Fewer than {math.ceil(needed)} can move it by impacts only, as their thrust is below what holds it"
    return f"{text}."


def influence_words(audit: Audit) -> str:
    """What to measure first, in sentences; empty where nothing was varied."""
    if not audit.influences:
        return ""
    seen = [one for one in audit.influences if one.is_seen][:N_FIRST]
    off = f"{audit.scenario.trial.tolerance:.0%}"
    if not seen:
        return f"No measured value, a quarter off, changes the block's speed beyond chance in {audit.arrival.n} runs."
    keys = ", ".join(f"{one.key} to within {share_of(one.precision)}" for one in seen)
    return f"Measure first: {keys}. An error of that size shifts the block's speed by {off}."


def step_words(run: Run) -> str:
    """The solver's step and iterations."""
    steps = run.steps
    return f"{for_people(steps.dt_s, 's')}, set by {steps.because}; {steps.iterations} solver iterations"


def command_of(result: Audit | Run) -> str:
    """The command that makes the same numbers on any machine with the same versions."""
    if isinstance(result, Audit):
        s = result.scenario
        first, most = result.look.planned[0], result.look.planned[-1]
        budget = f" --budget {most}" if most > first else ""
        around = " --around" if result.crews or result.influences else ""
        return f"swarmpush audit {scenario_word(s)} --replicates {first}{budget}{around} --seed {s.trial.seed}"
    return f"swarmpush run {scenario_word(result.scenario)} --seed {result.seed}"


def scenario_word(s: Scenario) -> str:
    """The demo of which this is the scenario, apart from its seed; else a file's name to be put in."""
    from swarmpush.loading import load

    for name in DEMOS:
        path = demo(name)
        if s.about.name in path.read_text(encoding="utf-8"):
            shipped = load(path).replace(trial={"seed": s.trial.seed})
            if shipped.digest() == s.digest():
                return name
    return "SCENARIO.toml"
