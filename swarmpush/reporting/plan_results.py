"""What goes with a plan: the maps and declarations that were asked for, as JSON, as sentences and as files."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from swarmpush.kinematics.declarations import Declarations
from swarmpush.kinematics.planning import Plan
from swarmpush.kinematics.settling import short_name
from swarmpush.output import plain, to_json, write_bytes, write_table, write_text
from swarmpush.quantities import for_people
from swarmpush.vary import column_of, unit_at

MAX_TOLD = 4  # laps of which a sentence tells


@dataclass(frozen=True)
class PlanResults:
    """A plan with its maps: see `cycle_map`, `basin_map`, `declarations`. key: that of the cycle map."""

    plan: Plan
    key: str = ""
    cycle_map: pd.DataFrame | None = None
    basin_map: pd.DataFrame | None = None
    declarations: Declarations | None = None

    def to_dict(self) -> dict[str, Any]:
        """All but the basin map's rows as plain values for JSON."""
        answer: dict[str, Any] = self.plan.to_dict()
        if self.cycle_map is not None:
            unit = unit_at(self.plan.scenario, self.key)
            answer["cycle_map"] = {"key": self.key, "unit": unit, "rows": plain(self.cycle_map.to_dict("records"))}
        if self.basin_map is not None:
            answer["basin_map"] = self._shares(self.basin_map)
        if self.declarations is not None:
            answer["declarations"] = self.declarations.to_dict()
        return answer

    def _shares(self, table: pd.DataFrame) -> dict[str, Any]:
        """What the basin map's starts come to."""
        caught = table[table["lap"] >= 0]
        laps = [
            {
                "lap": int(rows["lap"].iloc[0]),
                "surfaces": str(rows["surfaces"].iloc[0]),
                "share": len(rows) / len(table),
            }
            for _, rows in caught.groupby("lap")
        ]
        fates = table["fate"].value_counts(normalize=True)
        return {
            "starts": len(table),
            "behind_m": self.plan.scenario.block.rear_at - float(table["x_m"].iloc[0]),
            "fates": {str(fate): float(share) for fate, share in fates.items() if share > 0.0},
            "laps": laps,
        }

    def sentences(self) -> list[str]:
        """What a person wants to know of the maps and declarations."""
        told = []
        if self.cycle_map is not None:
            told += _of_cycle_map(self.plan, self.key, self.cycle_map)
        if self.declarations is not None:
            told.append(self.declarations.sentence)
        return told

    def save(self, folder: Path, *, is_drawn: bool) -> dict[str, Any]:
        """Write the plan, its picture and tables into a folder that is there; with `is_drawn` all pictures, twice.

        Returns:
            answer: what `plan.json` holds: `to_dict`, and the files where there are more than a plan alone has.

        Raises:
            OutputError: when a file cannot be written.
        """
        from swarmpush.reporting.drawing import as_png, as_svg
        from swarmpush.reporting.plan_drawing import basin_picture, cycle_map_picture, plan_picture

        pictures: dict[str, tuple[Any, ...]] = {"plan": (plan_picture, self.plan)}
        files = {"folder": str(folder)}
        if self.cycle_map is not None:
            pictures["cycle_map"] = (cycle_map_picture, self.plan, self.key, self.cycle_map)
            files["cycle_map"] = "cycle_map.parquet"
            write_table(folder / "cycle_map.parquet", self.cycle_map)
        if self.basin_map is not None:
            pictures["basin_map"] = (basin_picture, self.plan, self.basin_map)
            files["basin_map"] = "basin_map.parquet"
            write_table(folder / "basin_map.parquet", self.basin_map)
        for name, drawing in pictures.items():
            if is_drawn or name == "plan":
                write_bytes(folder / f"{name}.png", as_png(*drawing))
            if is_drawn:
                write_text(folder / f"{name}.svg", as_svg(*drawing))
                files |= {f"{name}_{kind}": f"{name}.{kind}" for kind in ("png", "svg")}
        answer = self.to_dict() | ({"files": files} if len(files) > 1 else {})
        write_text(folder / "plan.json", to_json(answer))
        return answer


def _of_cycle_map(plan: Plan, key: str, table: pd.DataFrame) -> list[str]:
    column, unit = column_of(plan.scenario, key), unit_at(plan.scenario, key)
    laps, gaps = table[table["lap"] >= 0], table[table["lap"] < 0]
    n = table[column].nunique()
    told = [f"laps along {key}, {_span(table[column], unit)} (number of values, {n} in all):"]
    frequent = laps.groupby("surfaces")["share"].sum().sort_values(ascending=False, kind="stable")
    for name in frequent.index[:MAX_TOLD]:
        rows = laps[laps["surfaces"] == name]
        kinds = [
            f"{kind} at {_span(those[column], unit)} ({len(those)})"
            for kind, those in rows.groupby("stability", sort=False)
        ]
        beyond = [*dict.fromkeys(w for w in [*rows["bounded_low_by"], *rows["bounded_high_by"]] if w)]
        ends = f"; an error beyond its band: {', '.join(beyond)}" if beyond else ""
        told.append(f"  {short_name(str(name).split(' - '))}: {', '.join(kinds)}{ends}")
    if len(frequent) > MAX_TOLD:
        told.append(f"  and {len(frequent) - MAX_TOLD} more laps")
    if len(gaps):
        first = gaps.iloc[0]
        told.append(f"  none at {_span(gaps[column], unit)} ({len(gaps)}); at the first: {first['reason']}")
    return told


def _span(values: pd.Series[float], unit: str) -> str:
    low, high = (for_people(float(end), unit) for end in (values.min(), values.max()))
    return low if low == high else f"{low} to {high}"
