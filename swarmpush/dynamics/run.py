"""The record of one run in the body world."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics import measures
from swarmpush.dynamics.bumps import find_bumps, find_completed_laps, lap_rows
from swarmpush.dynamics.states import STATES, Tables, failures, pusher_states
from swarmpush.dynamics.steps import StepSettings
from swarmpush.kinematics.boundary import REAR
from swarmpush.kinematics.laps import Lap
from swarmpush.loading import from_tables
from swarmpush.output import plain, provenance, to_json, write_table, write_text
from swarmpush.scenario import Scenario

TABLES = ("visits", "block", "pushers")


@dataclass(frozen=True)
class Books:
    """The block's momentum account over a run, in N s; x along the channel, y across it.

    pushers, blocks, walls, floor, drag, slope: impulse on the block by each; blocks are the further ones of a train.
    change: of its momentum. about_centre: the same account of angular momentum about its centre of mass, in N m s,
    by name. gross: sum of the sizes of all contact impulses on it. residual_rel: what does not balance, summed over
    all steps and blocks, over the sizes of all impulses on them; residual_turn_rel: the same about the centres. floor
    is what the balance leaves for it, and the residuals compare its size with the floor's own force while the block
    slides and with the impulses that its joints report by themselves. phantom_m, phantom_share: displacement that no
    velocity explains, summed by size, and over the distance the block covered; lower is better for both.
    """

    pushers: tuple[float, float]
    blocks: tuple[float, float]
    walls: tuple[float, float]
    floor: tuple[float, float]
    drag: tuple[float, float]
    slope: tuple[float, float]
    change: tuple[float, float]
    about_centre: dict[str, float]
    gross: float
    residual_rel: float
    residual_turn_rel: float
    phantom_m: float
    phantom_share: float


@dataclass(frozen=True)
class Energy:
    """Where the drives' work went over a run, in J, all bodies together.

    drive: work of the thrust. heading: of the drives that turn headings and hold them against contacts. slope: of
    gravity. drag, floor: taken by each. contacts: taken by collisions and friction, by kind of pair; less than 0 where
    Newton's restitution with friction makes energy. change: of kinetic energy. residual_rel: what does not balance,
    over all the work done.
    """

    drive: float
    heading: float
    slope: float
    drag: float
    floor: float
    contacts: dict[str, float]
    change: float
    residual_rel: float


@dataclass(frozen=True)
class Run:
    """What happened in one run.

    scenario, seed, steps: what was run. ended: "goal", "time" or the reason why it broke off. duration_s: model
    time. travel_m: of the block in +x. yaw_max_rad: largest yaw of the block. overlap_max_m: deepest overlap of two
    bodies. books, energy: see `Books` and `Energy`.

    visits: one row per visit, in order of time: pusher (from 0; -1 for a block against a wall or another block),
        partner ("block", "wall", "pusher"), surface, other_pusher (-1 unless partner is "pusher"), t_on_s, t_off_s,
        dwell_s, x_m, y_m and heading_rad at the first touch, approach_m_s (normal speed) and speed_m_s then, impact_Ns,
        lean_Ns, tangential_Ns (on the pusher, to the left as it faces its partner), block_dx_m within the visit,
        block_dx_next_m from then until a block is next touched anew (NaN for visits elsewhere), energy_lost_J,
        overlap_m.
    block: path of the block: t_s, x_m, y_m (of its centre of mass), yaw_rad, vx_m_s; then what happened since the last
        row, as means over time: n_leaning (pushers leaning on the rear face), leaning_share, strong_share,
        jammed_share (of time with pushers leaning, of these with a block that moves or enough push for the floor,
        and with a block that stands against such a push between walls), n_ahead, n_at_wall, n_at_pusher,
        n_turning, n_halted, n_failed, and n_leaning_most; of further blocks x_2_m, y_2_m, yaw_2_rad and so on.
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
    energy: Energy
    visits: pd.DataFrame
    block: pd.DataFrame
    pushers: pd.DataFrame
    bumps: pd.DataFrame
    laps: pd.DataFrame

    @property
    def speed_m_s(self) -> float:
        """Mean speed of the block in +x."""
        return self.travel_m / self.duration_s if self.duration_s > 0.0 else 0.0

    @cached_property
    def states(self) -> NDArray[np.object_]:
        """What each pusher is about at each row of `pushers`; see `states.pusher_states`."""
        tables = Tables(self.visits, self.block, self.pushers, self.bumps, self.laps)
        return pusher_states(self.scenario, tables)

    @cached_property
    def failures(self) -> pd.DataFrame:
        """What kept the crew from pushing, with times; see `states.failures`."""
        return failures(self.block, self.states, self.scenario.pushers.count)

    @property
    def causes(self) -> dict[str, float]:
        """What kept the crew from pushing, as shares of time from 0 to 1."""
        return dict(zip(self.failures["cause"], self.failures["share"].astype(float), strict=True))

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

    def summary(self, lap: Lap | None = None) -> dict[str, float]:
        """The run's measures as numbers, for statistics over runs; NaN where there is nothing to measure.

        Crew size x strike rate (per pusher) x nudge is the block's speed.

        Arguments:
            lap: the plan's main lap, with which strikes are compared. Without it lap_hit_y_m, lap_hit_heading_rad (mean
                place and heading of the strikes that close this lap), heading_growth, in_band_share and captured_share
                (of pushers that ever complete a lap of the plan) are NaN. The rest is explained in `measures.py`.
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
            **self._on_lap(lap),
            "moving_alone_share": measures.moving_alone_share(
                self.block, self.visits, self.scenario.pushers.free_speed
            ),
            "yaw_rms_rad": measures.yaw_rms(self.block),
            "reacting_share": measures.reacting_share(self.pushers),
            "strong_share": measures.strong_share(self.block),
            "bumps_between_pushers": measures.bumps_between_pushers(self.bumps),
            **{f"cause_{name}": share for name, share in self.causes.items()},
        }

    def _repr_html_(self) -> str:
        from swarmpush.reporting.notebook import run_html

        return run_html(self)

    def _on_lap(self, lap: Lap | None) -> dict[str, float]:
        """The measures that need the plan's lap."""
        names = ("lap_hit_y_m", "lap_hit_heading_rad", "heading_growth", "in_band_share", "captured_share")
        result = dict.fromkeys(names, math.nan)
        if lap is None:
            return result
        passes = lap_rows(self.bumps, (lap.surfaces,))
        ends = measures.lap_ends(self.bumps, lap, passes)
        if len(ends):
            result["lap_hit_y_m"] = float(ends["y_m"].mean())
            result["lap_hit_heading_rad"] = lap.rear_heading_rad + float(ends["after_rad"].mean())
        result["heading_growth"] = measures.heading_growth(ends)
        result["in_band_share"] = measures.share_in_band(self.bumps, lap, passes)
        if self.duration_s >= measures.LAPS_TO_CATCH * lap.time_s:
            result["captured_share"] = self.laps["pusher"].nunique() / self.scenario.pushers.count
        return result

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
                "energy_J": self.energy,
                "ended": self.ended,
                "duration_s": self.duration_s,
                "causes": self.causes,
                "cause_times": self.failures.set_index("cause").to_dict(orient="index"),
                "states": {name: float((self.states == name).mean()) for name in STATES},
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
    scenario = from_tables(text["scenario"], str(folder / "run.json"))
    visits, block, pushers = (pd.read_parquet(folder / f"{name}.parquet") for name in TABLES)
    bumps = find_bumps(visits, scenario.pushers.comeback_time)
    numerics = dict(text["numerics"])
    overlap = numerics.pop("overlap_max_m")
    books: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in text["books"].items()}
    return Run(
        scenario=scenario,
        seed=text["provenance"]["seed"],
        steps=StepSettings(**numerics),
        ended=text["ended"],
        duration_s=text["duration_s"],
        travel_m=text["block"]["travel_m"],
        yaw_max_rad=text["block"]["yaw_max_rad"],
        overlap_max_m=overlap,
        books=Books(**books),
        energy=Energy(**text["energy_J"]),
        visits=visits,
        block=block,
        pushers=pushers,
        bumps=bumps,
        laps=find_completed_laps(bumps, cycles),
    )
