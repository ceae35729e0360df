"""From the loop's arrays in engine units to tables in SI units."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics.blocks import BLOCK_STATE
from swarmpush.dynamics.crew import Mode
from swarmpush.dynamics.ledger import ENERGY, SERIES
from swarmpush.dynamics.loop import Path, Task
from swarmpush.dynamics.run import Books, Energy
from swarmpush.dynamics.steps import Units

VisitArray = NDArray[np.void]


def in_order(rows: VisitArray) -> VisitArray:
    """Visits in order of time, then owner, then partner."""
    return rows[np.lexsort((rows["partner"], rows["owner"], rows["first_step"]))]


def surfaces(log: VisitArray, walls: Sequence[str], sides: Sequence[str], n_moving: int) -> NDArray[np.object_]:
    """Names of the surfaces visited. walls, sides: those of the fixed sides, and of the blocks' sides."""
    names = np.array(["pusher", *sides, *walls], dtype=object)
    partner = log["partner"]
    return np.asarray(names[np.where(partner >= n_moving, 1 + len(sides) + partner - n_moving, log["face"])])


def visit_table(
    log: VisitArray,
    surface: NDArray[np.object_],
    n_pushers: int,
    n_moving: int,
    end_x: float,
    step_s: float,
    u: Units,
) -> pd.DataFrame:
    """The visits of a run; see `Run.visits`.

    Arguments:
        log: records of `VISIT` in order.
        surface: what each was on.
        n_pushers, n_moving: how many pushers, how many bodies that move.
        end_x: the struck block's place at the end, in engine units.
        step_s: time step.
    """
    owner, partner = log["owner"], log["partner"]
    is_pusher, is_wall = (partner >= 1) & (partner <= n_pushers), partner >= n_moving
    kinds = np.where(is_wall, "wall", np.where(is_pusher, "pusher", "block"))
    on_block = kinds == "block"
    touches = log[on_block]
    following = np.searchsorted(touches["first_step"], touches["last_step"], side="right")  # the first to begin later
    until_next = np.full(len(log), np.nan)
    until_next[on_block] = np.append(touches["block_x_on"], end_x)[following] - touches["block_x_off"]
    return pd.DataFrame(
        {
            "pusher": np.where((owner >= 1) & (owner <= n_pushers), owner - 1, -1),
            "partner": kinds.astype(object),
            "surface": surface,
            "other_pusher": np.where(is_pusher, partner - 1, -1),
            "t_on_s": log["first_step"] * step_s,
            "t_off_s": (log["last_step"] + 1.0) * step_s,
            "dwell_s": (log["last_step"] + 1.0 - log["first_step"]) * step_s,
            "x_m": log["x"] * u.length,
            "y_m": log["y"] * u.length,
            "heading_rad": np.remainder(log["heading"] + np.pi, 2 * np.pi) - np.pi,
            "approach_m_s": log["approach"] * u.speed,
            "speed_m_s": log["speed"] * u.speed,
            "impact_Ns": log["impact"] * u.impulse,
            "lean_Ns": log["lean"] * u.impulse,
            "tangential_Ns": log["tangential"] * u.impulse,
            "block_dx_m": (log["block_x_off"] - log["block_x_on"]) * u.length,
            "block_dx_next_m": until_next * u.length,
            "energy_lost_J": log["energy"] * u.energy,
            "overlap_m": log["overlap"] * u.length,
        }
    )


def block_table(path: Path, dt_s: float, u: Units) -> pd.DataFrame:
    """Path of the block and what happened since the last row; see `Run.block`."""
    n = int(path.n_rows[0])
    rows, series, steps = path.block[:n], path.series[:n], path.steps[:n]
    lasted = np.maximum(np.diff(steps, prepend=0), 1)
    columns = {
        "t_s": steps * dt_s,
        "x_m": rows[:, 0] * u.length,
        "y_m": rows[:, 1] * u.length,
        "yaw_rad": rows[:, 2],
        "vx_m_s": rows[:, 3] * u.speed,
    }
    columns |= {name: series[:, k] / lasted for k, name in enumerate(SERIES)}
    columns["n_leaning_most"] = series[:, -1]
    for k in range(path.train.shape[1]):
        x, y, yaw = path.train[:n, k].T
        columns |= {f"x_{k + 2}_m": x * u.length, f"y_{k + 2}_m": y * u.length, f"yaw_{k + 2}_rad": yaw}
    return pd.DataFrame(columns)


def pusher_table(path: Path, dt_s: float, u: Units) -> pd.DataFrame:
    """Paths of the pushers; see `Run.pushers`."""
    n_rows = int(path.n_rows[0])
    rows = path.pushers[:n_rows]
    n = rows.shape[1]
    modes = np.array([mode.name.lower() for mode in Mode], dtype=object)
    return pd.DataFrame(
        {
            "t_s": np.repeat(path.steps[:n_rows] * dt_s, n),
            "pusher": np.tile(np.arange(n), n_rows),
            "x_m": rows[:, :, 0].ravel() * u.length,
            "y_m": rows[:, :, 1].ravel() * u.length,
            "heading_rad": np.remainder(rows[:, :, 2].ravel() + np.pi, 2 * np.pi) - np.pi,
            "mode": modes[rows[:, :, 3].ravel().astype(np.int64)],
        }
    )


def books(task: Task, motion: NDArray[np.float64], distance: float, u: Units) -> Books:
    """The struck block's account. motion: see `Host`; distance: covered by the block; both in engine units."""
    block, velocity = task.ground.blocks[0], motion[0, 3:]
    total = {name: float(task.ground.blocks[name].sum()) for name in BLOCK_STATE.names or ()}
    by = {"pushers": "pushers", "blocks": "blocks", "walls": "walls", "floor": "ground", "drag": "liquid"}

    def pair(name: str) -> tuple[float, float]:
        return float(block[f"{name}_x"]) * u.impulse, float(block[f"{name}_y"]) * u.impulse

    return Books(
        **{name: pair(column) for name, column in by.items()},
        slope=pair("weight"),
        change=(float(block["mass"] * velocity[0]) * u.impulse, float(block["mass"] * velocity[1]) * u.impulse),
        about_centre={
            **{name: float(block[f"{column}_turn"]) * u.turn_impulse for name, column in by.items()},
            "change": float(block["moment"] * velocity[2]) * u.turn_impulse,
        },
        gross=float(block["gross"]) * u.impulse,
        residual_rel=_share(total["residual"], total["gross"] + total["steady"]),
        residual_turn_rel=_share(total["residual_turn"], total["gross_turn"] + total["steady_turn"]),
        phantom_m=float(block["phantom"]) * u.length,
        phantom_share=_share(float(block["phantom"]), distance),
    )


def energy(task: Task, kinetic: float, u: Units) -> Energy:
    """Where the drives' work went; `kinetic` energy at the end, in engine units."""
    totals = {name: float(task.ledger.totals[0][name]) for name in ENERGY}
    change = kinetic - float(task.ledger.totals[0]["kinetic_0"])
    given = totals["drive"] + totals["heading"] + totals["gravity"]
    taken = sum(totals[name] for name in ENERGY[3:])
    scale = abs(totals["drive"]) + abs(totals["heading"]) + abs(totals["gravity"]) + abs(change)
    return Energy(
        drive=totals["drive"] * u.energy,
        heading=totals["heading"] * u.energy,
        slope=totals["gravity"] * u.energy,
        drag=totals["drag"] * u.energy,
        floor=totals["floor"] * u.energy,
        contacts={name: totals[name] * u.energy for name in ENERGY[5:]},
        change=change * u.energy,
        residual_rel=_share(abs(given - taken - change), scale),
    )


def _share(part: float, whole: float) -> float:
    return part / whole if whole > 0.0 else 0.0
