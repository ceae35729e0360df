"""What each picture of a report shows, as tables with units in the names of columns."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd

from swarmpush.auditing.audit import Audit
from swarmpush.dynamics.run import Run
from swarmpush.geometry import block_corners
from swarmpush.kinematics.planning import Plan
from swarmpush.reporting.run_drawing import book_entries, bump_legs, is_floor_shown, pushers_needed, rolling
from swarmpush.reporting.run_words import energy_parts, state_shares


def as_csv(table: pd.DataFrame) -> str:
    """A table as CSV text: plain numbers with nine digits, nothing where a number is undefined.

    >>> as_csv(pd.DataFrame({"t_s": [0.0, 1 / 3]}))
    't_s\\n0\\n0.333333333\\n'
    """
    return str(table.to_csv(index=False, float_format="%.9g", lineterminator="\n"))


def ladder_data(audit: Audit) -> pd.DataFrame:
    """One row per rung: block speed, paired cost and arrival, each with the ends of its interval."""
    rows = []
    for rung in audit.ladder:
        row: dict[str, Any] = {"rung": rung.rung, "adds": rung.adds}
        for name, unit, estimate in (
            ("block_speed", "_m_s", rung.block_speed_m_s),
            ("cost", "_m_s", rung.cost_m_s),
            ("arrived", "_share", rung.arrival),
        ):
            for end, part in (("", "mean"), ("_low", "low"), ("_high", "high")):
                row[f"{name}{end}{unit}"] = math.nan if estimate is None else getattr(estimate, part)
        rows.append(row | {"n_runs": rung.block_speed_m_s.n})
    return pd.DataFrame(rows)


def arrival_data(audit: Audit) -> pd.DataFrame:
    """Share of runs arrived over time, with its interval, as given and bouncing at random."""
    tables = []
    for name, runs in (("as given", audit.as_given), ("bouncing at random", audit.at_random)):
        curve = audit.under_way(runs)
        columns = {"t_s": curve.times_s, "at_risk_runs": curve.at_risk, "arriving_runs": curve.events}
        shares = {"arrived": curve.share, "arrived_low": curve.high, "arrived_high": curve.low}
        columns |= {f"{column}_share": 1.0 - share for column, share in shares.items()}
        tables.append(pd.DataFrame({"crew": name} | columns))
    return pd.concat(tables, ignore_index=True)


def crew_data(audit: Audit) -> pd.DataFrame:
    """One row per size of the crew: block speed and arrivals with the ends of their intervals."""
    rows = [
        {
            "pushers": size.count,
            "block_speed_m_s": size.block_speed_m_s.mean,
            "block_speed_low_m_s": size.block_speed_m_s.low,
            "block_speed_high_m_s": size.block_speed_m_s.high,
            "arrived_share": size.arrival.mean,
            "arrived_low_share": size.arrival.low,
            "arrived_high_share": size.arrival.high,
            "strikes_1_s": size.strikes_1_s,
            "too_weak_share": size.too_weak,
            "in_touch_share": size.in_touch,
        }
        for size in audit.crews
    ]
    return pd.DataFrame(rows)


def lap_data(plan: Plan, run: Run) -> pd.DataFrame:
    """Straight lines as seen from the block: the planned lap's, those of completed laps, and others."""
    parts = bump_legs(run)
    if plan.main_lap is not None:
        corners = plan.main_lap.hits[:, :2]
        parts.insert(0, ("planned lap", np.stack([corners, np.roll(corners, -1, axis=0)], axis=1)))
    columns = ["x_from_m", "y_from_m", "x_to_m", "y_to_m"]
    tables = [pd.DataFrame(legs.reshape(-1, 4), columns=columns).assign(line=name) for name, legs in parts]
    return pd.concat(tables, ignore_index=True)[["line", *columns]]


def path_data(run: Run, planned_speed_m_s: float, ends: pd.DataFrame | None) -> pd.DataFrame:
    """Travel over time: of each block in the run shown, as planned, and where other runs ended."""
    t, s = run.block["t_s"], run.scenario
    tables = []
    for k in range(len(s.blocks)):
        x = run.block["x_m" if k == 0 else f"x_{k + 1}_m"]
        tables.append(pd.DataFrame({"line": f"block {k + 1}", "t_s": t, "travel_m": x - x.iloc[0]}))
    if math.isfinite(planned_speed_m_s):
        planned = pd.DataFrame({"line": "planned", "t_s": [0.0, run.duration_s]})
        tables.append(planned.assign(travel_m=planned["t_s"] * planned_speed_m_s))
    if ends is not None:
        tables.append(pd.DataFrame({"line": "end of a run", "t_s": ends["duration_s"], "travel_m": ends["travel_m"]}))
    return pd.concat(tables, ignore_index=True)


def end_data(run: Run) -> pd.DataFrame:
    """Where each body was when the run began and when it ended: blocks by their centres of mass, pushers by theirs."""
    s = run.scenario
    rows = []
    for when, row in (("start", run.block.iloc[0]), ("end", run.block.iloc[-1])):
        for k, block in enumerate(s.blocks):
            tail = f"_{k + 1}" if k else ""
            width = np.ptp(np.array(block_corners(s, block))[:, 1])
            place = [row[f"{column}{tail}_{unit}"] for column, unit in (("x", "m"), ("y", "m"), ("yaw", "rad"))]
            rows.append((f"block {k + 1}", when, row["t_s"], *place, block.length, width, ""))
    n = s.pushers.count
    for when, crew in (("start", run.pushers.iloc[:n]), ("end", run.pushers.iloc[-n:])):
        size = (2 * s.pushers.radius + s.pushers.trunk, 2 * s.pushers.radius + s.pushers.nose)
        rows += [
            (f"pusher {p.pusher}", when, p.t_s, p.x_m, p.y_m, p.heading_rad, *size, p.mode) for p in crew.itertuples()
        ]
    columns = ["body", "when", "t_s", "x_m", "y_m", "angle_rad", "length_m", "width_m", "mode"]
    return pd.DataFrame(rows, columns=columns)


def impulse_data(run: Run) -> pd.DataFrame:
    """One row per strike on the rear face, in order of time."""
    strikes = run.strikes.sort_values("t_on_s", kind="stable")
    return strikes[["t_on_s", "pusher", "impact_Ns", "lean_Ns"]]


def leaning_data(run: Run) -> pd.DataFrame:
    """Pushers leaning at once over time: rolling mean, most since the last row, and as many as the blocks need."""
    block = run.block
    table = pd.DataFrame(
        {
            "t_s": block["t_s"],
            "leaning_mean_pushers": rolling(block["n_leaning"].to_numpy()),
            "leaning_most_pushers": block["n_leaning_most"],
        }
    )
    if is_floor_shown(run):
        needed = pushers_needed(run, block["t_s"].to_numpy())
        table["needed_pushers"] = np.where(np.isfinite(needed), needed, np.nan)
    return table


def state_data(run: Run) -> pd.DataFrame:
    """Share of the crew in each state over time, 0 to 1, as rolling means."""
    shares = state_shares(run)
    columns = {f"{str(name).replace(' ', '_')}_share": rolling(shares[name].to_numpy()) for name in shares}
    return pd.DataFrame({"t_s": shares.index.to_numpy()} | columns)


def energy_data(run: Run) -> pd.DataFrame:
    """The energy account: what went in is positive."""
    return pd.DataFrame(energy_parts(run), columns=["part", "energy_J"])


def book_data(run: Run) -> pd.DataFrame:
    """The block's momentum account along the channel."""
    return pd.DataFrame(book_entries(run), columns=["part", "impulse_Ns"])
