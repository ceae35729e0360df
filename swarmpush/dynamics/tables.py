"""From the loop's arrays in engine units to tables in SI units."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics.crew import Mode
from swarmpush.dynamics.ledger import Column, Face, Ledger, Total
from swarmpush.dynamics.loop import Path, Task
from swarmpush.dynamics.run import Books
from swarmpush.dynamics.steps import Units
from swarmpush.kinematics.boundary import SURFACES

FloatArray = NDArray[np.float64]

_FACES = {Face.REAR: "rear", Face.LOWER: "block bottom", Face.FRONT: "front", Face.UPPER: "block top"}
_WALLS = SURFACES[:4]


def open_visits(ledger: Ledger) -> FloatArray:
    """Rows for the visits that have not ended, as the log would hold them."""
    rows = [
        _row(ledger, owner, slot)
        for owner, partners in enumerate(ledger.slot_partner)
        for slot in np.flatnonzero(partners >= 0).tolist()
    ]
    return np.array(rows, dtype=np.float64).reshape(-1, len(Column))


def _row(ledger: Ledger, owner: int, slot: int) -> FloatArray:
    row: FloatArray = ledger.slot_data[owner, slot].copy()
    row[Column.OWNER], row[Column.PARTNER] = owner, ledger.slot_partner[owner, slot]
    return row


def visit_table(rows: Sequence[FloatArray], n_pushers: int, dt: float, u: Units) -> pd.DataFrame:
    """The visits of a run; see `Run.visits`."""
    log = np.concatenate(rows)
    log = log[np.lexsort((log[:, Column.PARTNER], log[:, Column.OWNER], log[:, Column.FIRST_STEP]))]
    partner = log[:, Column.PARTNER].astype(np.int64)
    is_pusher, is_wall = (partner >= 1) & (partner <= n_pushers), partner > n_pushers
    kinds = np.where(partner == 0, "block", np.where(is_wall, "wall", "pusher"))
    names = np.array(["pusher", *(_FACES[Face(k)] for k in range(1, 5)), *_WALLS], dtype=object)
    code = np.where(is_wall, 5 + partner - n_pushers - 1, log[:, Column.FACE].astype(np.int64))
    step_s = dt * u.time
    return pd.DataFrame(
        {
            "pusher": log[:, Column.OWNER].astype(np.int64) - 1,
            "partner": kinds.astype(object),
            "surface": names[code],
            "other_pusher": np.where(is_pusher, partner - 1, -1),
            "t_on_s": log[:, Column.FIRST_STEP] * step_s,
            "t_off_s": (log[:, Column.LAST_STEP] + 1.0) * step_s,
            "x_m": log[:, Column.X] * u.length,
            "y_m": log[:, Column.Y] * u.length,
            "heading_rad": np.remainder(log[:, Column.HEADING] + np.pi, 2 * np.pi) - np.pi,
            "approach_m_s": log[:, Column.APPROACH] * u.speed,
            "impact_Ns": log[:, Column.IMPACT] * u.impulse,
            "lean_Ns": log[:, Column.LEAN] * u.impulse,
            "tangential_Ns": log[:, Column.TANGENTIAL] * u.impulse,
            "block_dx_m": (log[:, Column.BLOCK_X_OFF] - log[:, Column.BLOCK_X_ON]) * u.length,
            "overlap_m": log[:, Column.OVERLAP] * u.length,
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
    totals = task.ledger.totals
    mass = task.rig.block_mass

    def pair(x: Total, y: Total, factor: float = 1.0) -> tuple[float, float]:
        return float(totals[x]) * factor * u.impulse, float(totals[y]) * factor * u.impulse

    gross = float(totals[Total.GROSS])
    return Books(
        pushers=pair(Total.PUSHERS_X, Total.PUSHERS_Y),
        walls=pair(Total.WALLS_X, Total.WALLS_Y),
        floor=pair(Total.FLOOR_X, Total.FLOOR_Y),
        drag=pair(Total.DRAG_X, Total.DRAG_Y),
        change=pair(Total.OLD_VX, Total.OLD_VY, mass),
        gross=gross * u.impulse,
        residual_rel=float(totals[Total.RESIDUAL]) / gross if gross > 0.0 else 0.0,
        phantom_m=float(totals[Total.PHANTOM_GROSS]) * u.length,
        phantom_share=float(totals[Total.PHANTOM_GROSS]) / distance if distance > 0.0 else 0.0,
    )


def causes(task: Task, n_steps: int) -> dict[str, float]:
    """What kept the crew from pushing, as shares of the crew's or the block's time."""
    totals, n = task.ledger.totals, len(task.crew.heading)
    crew_steps, block_steps = max(n_steps * n, 1), max(n_steps, 1)
    weak = totals[Total.LEANING_STEPS] - totals[Total.STRONG_STEPS]
    shares = {
        "ahead_of_block": totals[Total.AHEAD] / crew_steps,
        "touching_wall": totals[Total.AT_WALL] / crew_steps,
        "touching_pusher": totals[Total.AT_PUSHER] / crew_steps,
        "turning": totals[Total.TURNING] / crew_steps,
        "halted": totals[Total.STOPPED] / crew_steps,
        "leaning_too_weak_for_floor": weak / block_steps,
        "block_jammed_between_walls": totals[Total.JAMMED_STEPS] / block_steps,
    }
    return {name: float(share) for name, share in shares.items()}
