"""The record of one run in the body world."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from swarmpush.dynamics.bumps import find_bumps, find_completed_laps
from swarmpush.dynamics.steps import StepSettings
from swarmpush.kinematics.boundary import REAR
from swarmpush.loading import from_tables
from swarmpush.output import plain, provenance, to_json, write_table, write_text
from swarmpush.scenario import Scenario

TABLES = ("visits", "block", "pushers")


@dataclass(frozen=True)
class Books:
    """The block's momentum account over a run, in N s; x along the channel, y across it.

    pushers, walls, floor, drag: impulse on the block by each. change: of its momentum. gross: sum of the sizes of
    all contact impulses on it. residual_rel: what does not balance, summed over all steps, over `gross`.
    floor is what the balance leaves for it, and the residual compares its size with the impulse that the floor's
    joint reports by itself. phantom_m, phantom_share: displacement that no velocity explains, summed by size, and
    over the distance the block covered; lower is better for both.
    """

    pushers: tuple[float, float]
    walls: tuple[float, float]
    floor: tuple[float, float]
    drag: tuple[float, float]
    change: tuple[float, float]
    gross: float
    residual_rel: float
    phantom_m: float
    phantom_share: float


@dataclass(frozen=True)
class Run:
    """What happened in one run.

    scenario, seed, steps: what was run. ended: "goal", "time" or the reason why it broke off. duration_s: model
    time. travel_m: of the block in +x. yaw_max_rad: largest yaw of the block. overlap_max_m: deepest overlap of two
    bodies. books: see `Books`. causes: what kept the crew from pushing, as shares of time from 0 to 1.

    visits: one row per visit, in order of time: pusher (from 0; -1 for the block against a wall), partner ("block",
        "wall", "pusher"), surface, other_pusher (-1 unless partner is "pusher"), t_on_s, t_off_s, x_m, y_m and
        heading_rad at the first touch, approach_m_s, impact_Ns, lean_Ns, tangential_Ns (on the pusher, to the left as
        it faces its partner), block_dx_m within the visit,
        overlap_m.
    block: path of the block: t_s, x_m, y_m, yaw_rad, vx_m_s, n_leaning (mean since the last row).
    pushers: path of the pushers: t_s, pusher, x_m, y_m, heading_rad, mode.
    bumps, laps: see `bumps.py`.
    """

    scenario: Scenario
    seed: int
    steps: StepSettings
    ended: str
    duration_s: float
    travel_m: float
    yaw_max_rad: float
    overlap_max_m: float
    books: Books
    causes: dict[str, float]
    visits: pd.DataFrame
    block: pd.DataFrame
    pushers: pd.DataFrame
    bumps: pd.DataFrame
    laps: pd.DataFrame

    @property
    def speed_m_s(self) -> float:
        """Mean speed of the block in +x."""
        return self.travel_m / self.duration_s if self.duration_s > 0.0 else 0.0

    @property
    def has_arrived(self) -> bool:
        return self.ended == "goal"

    @property
    def strikes(self) -> pd.DataFrame:
        """The bumps on the rear face."""
        return self.bumps[self.bumps["surface"] == REAR]

    @property
    def lock_share(self) -> float:
        """Share of the pushers' time that went into completed laps, from 0 to 1."""
        total = self.duration_s * self.scenario.pushers.count
        return float((self.laps["t_end_s"] - self.laps["t_start_s"]).sum() / total) if total > 0.0 else 0.0

    def summary(self) -> dict[str, float]:
        """The run's measures as numbers, for statistics over runs; NaN where there is nothing to measure.

        Crew size x strike rate (per pusher) x nudge is the block's speed.
        """
        strikes = self.strikes
        n = len(strikes)
        times = (self.laps["t_end_s"] - self.laps["t_start_s"]).to_numpy()
        lap_time = float(times.mean()) if len(times) else float("nan")
        crew_time = self.duration_s * self.scenario.pushers.count
        impact, lean = float(strikes["impact_Ns"].sum()), float(strikes["lean_Ns"].sum())
        return {
            "block_speed_m_s": self.speed_m_s,
            "travel_m": self.travel_m,
            "duration_s": self.duration_s,
            "has_arrived": float(self.has_arrived),
            "strike_rate_1_s": n / crew_time if crew_time > 0.0 else float("nan"),
            "lap_time_s": lap_time,
            "nudge_m": self.travel_m / n if n else float("nan"),
            "impact_Ns": impact / n if n else float("nan"),
            "lean_Ns": lean / n if n else float("nan"),
            "lock_share": self.lock_share,
            "n_strikes": float(n),
            "n_laps": float(len(self.laps)),
            "residual_rel": self.books.residual_rel,
            "phantom_share": self.books.phantom_share,
            **{f"cause_{name}": share for name, share in self.causes.items()},
        }

    def to_dict(self, files: dict[str, str] | None = None) -> dict[str, Any]:
        """The run as plain values for JSON; undefined values are None."""
        strikes = self.strikes
        summary: dict[str, Any] = plain(
            {
                "block": {"travel_m": self.travel_m, "speed_m_s": self.speed_m_s, "yaw_max_rad": self.yaw_max_rad},
                "visits": len(self.visits),
                "strikes": len(strikes),
                "strike_impulse_Ns": {
                    "impact": strikes["impact_Ns"].mean() if len(strikes) else None,
                    "lean": strikes["lean_Ns"].mean() if len(strikes) else None,
                },
                "lock_share": self.lock_share,
                "laps": len(self.laps),
                "books": self.books,
                "ended": self.ended,
                "duration_s": self.duration_s,
                "causes": self.causes,
                "numerics": {**plain(self.steps), "overlap_max_m": self.overlap_max_m},
                "files": files or {},
                "provenance": provenance(self.scenario, seed=self.seed),
            }
        )
        return summary

    def save(self, folder: Path) -> dict[str, str]:
        """Write the tables as Parquet and the summary, last, as run.json; returns the files' names.

        Raises:
            OutputError: when something cannot be written.
        """
        files = {name: f"{name}.parquet" for name in TABLES}
        for name, file in files.items():
            write_table(folder / file, getattr(self, name))
        summary = self.to_dict(files) | {"scenario": self.scenario.to_tables()}
        write_text(folder / "run.json", to_json(summary))
        return files


def load_run(folder: Path, cycles: tuple[tuple[str, ...], ...] = ()) -> Run:
    """Read a saved run; `cycles` are the planned laps to look for.

    Raises:
        OSError, KeyError, ValueError: when the folder does not hold a run.
    """
    text = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    visits, block, pushers = (pd.read_parquet(folder / f"{name}.parquet") for name in TABLES)
    bumps = find_bumps(visits)
    numerics = dict(text["numerics"])
    overlap = numerics.pop("overlap_max_m")
    books: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in text["books"].items()}
    return Run(
        scenario=from_tables(text["scenario"], str(folder / "run.json")),
        seed=text["provenance"]["seed"],
        steps=StepSettings(**numerics),
        ended=text["ended"],
        duration_s=text["duration_s"],
        travel_m=text["block"]["travel_m"],
        yaw_max_rad=text["block"]["yaw_max_rad"],
        overlap_max_m=overlap,
        books=Books(**books),
        causes=text["causes"],
        visits=visits,
        block=block,
        pushers=pushers,
        bumps=bumps,
        laps=find_completed_laps(bumps, cycles),
    )
