"""From the loop's arrays in engine units to tables in SI units."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics.crew import Mode
from swarmpush.dynamics.ledger import Ledger
from swarmpush.dynamics.loop import Path, Task
from swarmpush.dynamics.run import Books
from swarmpush.dynamics.steps import Units

VisitArray = NDArray[np.void]


def open_visits(ledger: Ledger) -> VisitArray:
    """The visits that have not ended, as the log would hold them."""
    return ledger.slots[ledger.slots["partner"] >= 0]


def visit_table(
    rows: Sequence[VisitArray], walls: Sequence[str], sides: Sequence[str], n_pushers: int, dt: float, u: Units
) -> pd.DataFrame:
    """The visits of a run; see `Run.visits`. walls, sides: names of the fixed sides and of the block's."""
    log = np.concatenate(rows)
    log = log[np.lexsort((log["partner"], log["owner"], log["first_step"]))]
    partner = log["partner"]
    is_pusher, is_wall = (partner >= 1) & (partner <= n_pushers), partner > n_pushers
    kinds = np.where(partner == 0, "block", np.where(is_wall, "wall", "pusher"))
    names = np.array(["pusher", *sides, *walls], dtype=object)
    code = np.where(is_wall, len(sides) + partner - n_pushers, log["face"])
    step_s = dt * u.time
    return pd.DataFrame(
        {
            "pusher": log["owner"] - 1,
            "partner": kinds.astype(object),
            "surface": names[code],
            "other_pusher": np.where(is_pusher, partner - 1, -1),
            "t_on_s": log["first_step"] * step_s,
            "t_off_s": (log["last_step"] + 1.0) * step_s,
            "x_m": log["x"] * u.length,
            "y_m": log["y"] * u.length,
            "heading_rad": np.remainder(log["heading"] + np.pi, 2 * np.pi) - np.pi,
            "approach_m_s": log["approach"] * u.speed,
            "impact_Ns": log["impact"] * u.impulse,
            "lean_Ns": log["lean"] * u.impulse,
            "tangential_Ns": log["tangential"] * u.impulse,
            "block_dx_m": (log["block_x_off"] - log["block_x_on"]) * u.length,
            "overlap_m": log["overlap"] * u.length,
        }
    )


def block_table(path: Path, n_rows: int, interval_s: float, u: Units) -> pd.DataFrame:
    """Path of the block; see `Run.block`."""
    rows = path.block[:n_rows]
    return pd.DataFrame(
        {
            "t_s": np.arange(n_rows) * interval_s,
            "x_m": rows[:, 0] * u.length,
            "y_m": rows[:, 1] * u.length,
            "yaw_rad": rows[:, 2],
            "vx_m_s": rows[:, 3] * u.speed,
            "n_leaning": rows[:, 4],
        }
    )


def pusher_table(path: Path, n_rows: int, interval_s: float, u: Units) -> pd.DataFrame:
    """Paths of the pushers; see `Run.pushers`."""
    rows = path.pushers[:n_rows]
    n = rows.shape[1]
    modes = np.array([mode.name.lower() for mode in Mode], dtype=object)
    return pd.DataFrame(
        {
            "t_s": np.repeat(np.arange(n_rows) * interval_s, n),
            "pusher": np.tile(np.arange(n), n_rows),
            "x_m": rows[:, :, 0].ravel() * u.length,
            "y_m": rows[:, :, 1].ravel() * u.length,
            "heading_rad": np.remainder(rows[:, :, 2].ravel() + np.pi, 2 * np.pi) - np.pi,
            "mode": modes[rows[:, :, 3].ravel().astype(np.int64)],
        }
    )


def books(task: Task, distance: float, u: Units) -> Books:
    """The block's account, from the running totals; `distance` covered by the block in engine units."""
    totals = task.ledger.totals[0]
    mass = task.rig.block_mass

    def pair(name: str, factor: float = 1.0) -> tuple[float, float]:
        x, y = float(totals[f"{name}x"]), float(totals[f"{name}y"])
        return x * factor * u.impulse, y * factor * u.impulse

    gross = float(totals["gross"])
    return Books(
        pushers=pair("pushers_"),
        walls=pair("walls_"),
        floor=pair("floor_"),
        drag=pair("drag_"),
        change=pair("old_v", mass),
        gross=gross * u.impulse,
        residual_rel=float(totals["residual"]) / gross if gross > 0.0 else 0.0,
        phantom_m=float(totals["phantom"]) * u.length,
        phantom_share=float(totals["phantom"]) / distance if distance > 0.0 else 0.0,
    )


def causes(task: Task, n_steps: int) -> dict[str, float]:
    """What kept the crew from pushing, as shares of the crew's or the block's time."""
    totals, n = task.ledger.totals[0], len(task.crew.pushers)
    crew_steps, block_steps = max(n_steps * n, 1), max(n_steps, 1)
    weak = totals["leaning_steps"] - totals["strong_steps"]
    shares = {
        "ahead_of_block": totals["ahead"] / crew_steps,
        "touching_wall": totals["at_wall"] / crew_steps,
        "touching_pusher": totals["at_pusher"] / crew_steps,
        "turning": totals["turning"] / crew_steps,
        "halted": totals["stopped"] / crew_steps,
        "leaning_too_weak_for_floor": weak / block_steps,
        "block_jammed_between_walls": totals["jammed_steps"] / block_steps,
    }
    return {name: float(share) for name, share in shares.items()}
