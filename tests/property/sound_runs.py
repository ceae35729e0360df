"""What must hold of any run of the body world, whatever its scenario."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np

from swarmpush.dynamics.loop import Ending
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.simulation import ENDINGS
from swarmpush.dynamics.states import STATES

MOMENTUM = 1e-9  # unbalanced momentum over all impulses; rounding leaves 1e-15, and more in long runs
ENERGY = 1e-9  # unbalanced energy over all work
SHARE = 1e-9  # shares are sums of many steps
SHARES = ("moving_alone_share", "reacting_share", "strong_share", "bumps_between_pushers")  # of a summary
RAN_AWAY = ENDINGS[Ending.NOT_A_NUMBER]
# columns that hold NaN where there is nothing to tell, by table
MAY_LACK: dict[str, set[str]] = {
    "visits": {"block_dx_next_m"}, "block": set(), "pushers": set(), "bumps": {"x_m", "y_m", "heading_rad"},
    "laps": set(),
}  # fmt: skip


def faults_of(run: Run) -> list[str]:
    """What is wrong with a run, a sentence each."""
    return [*_balance(run), *_numbers(run), *_states(run), *_order(run), *_inside(run)]


def _balance(run: Run) -> Iterator[str]:
    for name, value, most in (
        ("momentum", run.books.residual_rel, MOMENTUM),
        ("angular momentum", run.books.residual_turn_rel, MOMENTUM),
        ("energy", run.energy.residual_rel, ENERGY),
    ):
        if not value <= most:
            yield f"{name} does not balance: {value:.2e}"
    books = run.books
    parts = np.array([books.pushers, books.blocks, books.walls, books.floor, books.drag, books.slope])
    off = np.abs(parts.sum(axis=0) - books.change).max()
    if not off <= MOMENTUM * max(np.abs(parts).sum(), books.gross):
        yield f"the block's books do not add up to its momentum: {off:.2e} N s are missing"
    if not (math.isfinite(books.phantom_m) and books.phantom_m >= 0.0):
        yield f"phantom displacement is {books.phantom_m}"


def _numbers(run: Run) -> Iterator[str]:
    if run.ended not in ENDINGS.values():
        yield f"no reason for the end: {run.ended!r}"
    if run.ended == RAN_AWAY:
        return  # the last row shows what ran away
    for name in MAY_LACK:
        table = getattr(run, name)
        numbers = table.select_dtypes("number")
        bad = [column for column in set(numbers) - MAY_LACK[name] if not np.isfinite(numbers[column].to_numpy()).all()]
        if bad:
            yield f"{name} has values that are no numbers in {', '.join(bad)}"
    for name, value in _flat("run", run.to_dict()):
        if isinstance(value, float) and not math.isfinite(value):
            yield f"{name} is {value}"
    summary = run.summary()
    if not math.isfinite(summary["travel_m"] + summary["block_speed_m_s"] + summary["lock_share"]):
        yield "the summary's measures are no numbers"
    for name in SHARES:
        if not (math.isnan(summary[name]) or 0.0 <= summary[name] <= 1.0 + SHARE):
            yield f"{name} is {summary[name]}"


def _flat(name: str, value: Any) -> Iterator[tuple[str, Any]]:
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _flat(f"{name}.{key}", inner)
    elif isinstance(value, list):
        for inner in value:
            yield from _flat(name, inner)
    else:
        yield name, value


def _states(run: Run) -> Iterator[str]:
    if set(run.states) - set(STATES) or len(run.states) != len(run.pushers):
        yield "a state is none of the known ones"
    failures = run.failures
    if not failures["share"].between(0.0, 1.0 + SHARE).all():
        yield f"a cause's share is beyond 0 to 1: {failures['share'].to_list()}"
    happened = failures[failures["spells"] > 0]
    end = run.duration_s * (1 + SHARE)
    if not (happened["t_first_s"].ge(0.0) & happened["t_last_s"].le(end) & happened["longest_s"].le(end)).all():
        yield "a cause lies outside the run"
    if not (happened["t_first_s"] < happened["t_last_s"]).all():
        yield "a cause ends before it begins"
    if not failures.loc[failures["spells"] == 0, ["t_first_s", "t_last_s"]].isna().all(axis=None):
        yield "what never happened has a time"


def _order(run: Run) -> Iterator[str]:
    visits, s = run.visits, run.scenario
    if not (visits["t_off_s"] > visits["t_on_s"]).all():
        yield "a visit ends before it begins"
    if not (visits["t_off_s"] <= run.duration_s * (1 + SHARE)).all():
        yield "a visit outlasts the run"
    if not (visits["impact_Ns"] >= 0.0).all():
        yield "an impact pulls"
    if not (visits["lean_Ns"] >= -SHARE * visits["impact_Ns"]).all():
        yield f"a lean pulls: {visits['lean_Ns'].min():.2e}"
    if not set(visits["pusher"]) <= set(range(-1, s.pushers.count)):
        yield "a visit belongs to nobody"
    if s.pushers.pass_through and (visits["partner"] == "pusher").any():
        yield "pushers that pass through each other have met"
    if s.block.yaw == "held" and run.yaw_max_rad != 0.0:
        yield "a held block has turned"
    if not (np.diff(run.block["t_s"]) >= 0.0).all():
        yield "the path goes back in time"


def _inside(run: Run) -> Iterator[str]:
    if run.ended not in ("time", "goal"):
        return
    s = run.scenario
    r = s.pushers.radius
    inside = run.pushers["x_m"].between(0.4 * r, s.channel.length - 0.4 * r)
    inside &= run.pushers["y_m"].between(0.4 * r, s.channel.width - 0.4 * r)
    if not inside.all():
        yield "a pusher stands in a wall"
