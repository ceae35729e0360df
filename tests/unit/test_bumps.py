"""From visits to bumps, strikes and laps, on tables made by hand."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from swarmpush.dynamics.bumps import LAP_COLUMNS, find_bumps, find_completed_laps

Row = tuple[int, str, float]  # pusher, surface, time of the first touch; "with 3" for a visit with pusher 3


def visits(*rows: Row) -> pd.DataFrame:
    """A visit table in order of time; each visit lasts 0.5 s, gives 1 N s by impact and 2 N s by leaning."""
    table = []
    for k, (pusher, surface, t) in enumerate(sorted(rows, key=lambda row: row[2])):
        other = int(surface.split()[1]) if surface.startswith("with") else -1
        wall = surface in ("bottom", "top", "near end", "far end")
        partner = "pusher" if other >= 0 else "wall" if wall else "block"
        table.append(
            {
                "pusher": pusher, "partner": partner, "surface": "pusher" if other >= 0 else surface,
                "other_pusher": other, "t_on_s": t, "t_off_s": t + 0.5, "x_m": 10.0 + k, "y_m": 20.0 + k,
                "heading_rad": 0.1 * k, "approach_m_s": 1.0 + k, "impact_Ns": 1.0, "lean_Ns": 2.0,
            }
        )  # fmt: skip
    columns = {"pusher": np.int64, "other_pusher": np.int64, "partner": object, "surface": object}
    if not table:
        names = ["pusher", "partner", "surface", "other_pusher", "t_on_s", "t_off_s", "x_m", "y_m", "heading_rad"]
        names += ["approach_m_s", "impact_Ns", "lean_Ns"]
        return pd.DataFrame({name: pd.Series(dtype=columns.get(name, np.float64)) for name in names})
    return pd.DataFrame(table)


def sequence(pusher: int, surfaces: str, start: float = 0.0) -> list[Row]:
    """Visits of one pusher one second apart; letters: r rear, t top, b bottom, n near end, f front, 0-9 that pusher."""
    names = {"r": "rear", "t": "top", "b": "bottom", "n": "near end", "f": "front"}
    return [(pusher, names.get(c, f"with {c}"), start + k) for k, c in enumerate(surfaces)]


def surfaces_of(bumps: pd.DataFrame, pusher: int) -> list[str]:
    return bumps[bumps["pusher"] == pusher]["surface"].tolist()


# ---- bumps --------------------------------------------------------------------------------------------------------


def test_repeated_visits_to_one_surface_are_one_bump() -> None:
    """A pusher that rebounds and comes back has bumped once: first touch, last parting, impulses summed."""
    bumps = find_bumps(visits(*sequence(0, "rrrt")))
    assert surfaces_of(bumps, 0) == ["rear", "top"]
    first = bumps.iloc[0]
    assert (first["t_on_s"], first["t_off_s"]) == (0.0, 2.5)
    assert (first["impact_Ns"], first["lean_Ns"]) == (3.0, 6.0)
    assert (first["approach_m_s"], first["heading_rad"]) == (1.0, 0.0)
    assert (first["x_m"], first["y_m"]) == (10.0, 20.0)


def test_rattling_is_one_bump() -> None:
    """A pusher that is back at a surface at once has bumped once, whatever it has touched meanwhile."""
    table = visits(*sequence(0, "r1r1rt"), (0, "rear", 9.0))
    for apart, surfaces in ((0.0, 7), (1.4, 7), (1.6, 4)):  # visits to the same surface are 1.5 s apart
        bumps = find_bumps(table, apart)
        assert len(surfaces_of(bumps, 0)) == surfaces
        assert bumps["impact_Ns"].sum() == 9.0  # the neighbour's two as well
    assert surfaces_of(bumps, 0) == ["rear", "pusher", "top", "rear"]
    assert bumps["t_off_s"].iloc[0] == 4.5


def test_pushers_do_not_run_into_one_bump() -> None:
    """The last bump of one pusher and the first of the next are two, on the same surface as well."""
    bumps = find_bumps(visits((0, "rear", 0.0), (1, "rear", 1.0), (0, "top", 2.0), (1, "rear", 3.0)))
    assert surfaces_of(bumps, 0) == ["rear", "top"]
    assert surfaces_of(bumps, 1) == ["rear"]
    assert bumps["pusher"].tolist() == [0, 0, 1]


def test_a_meeting_is_a_bump_of_both() -> None:
    """A visit between two pushers is entered once and is a bump of each, in the order of time."""
    bumps = find_bumps(visits((0, "top", 0.0), (0, "with 1", 1.0), (1, "bottom", 0.5), (1, "rear", 2.0)))
    assert surfaces_of(bumps, 0) == ["top", "pusher"]
    assert surfaces_of(bumps, 1) == ["bottom", "pusher", "rear"]
    second = bumps[(bumps["pusher"] == 1) & (bumps["surface"] == "pusher")].iloc[0]
    assert second["impact_Ns"] == 1.0
    assert math.isnan(second["heading_rad"])


def test_visits_of_the_block_are_nobodys_bumps() -> None:
    """The block's own visits to walls, with pusher -1, are left out."""
    assert len(find_bumps(visits((-1, "top", 0.0), (-1, "bottom", 1.0)))) == 0
    assert surfaces_of(find_bumps(visits((-1, "top", 0.0), (0, "rear", 1.0))), 0) == ["rear"]


def test_no_visits_no_bumps() -> None:
    """An empty table gives an empty one with the same columns."""
    empty, full = find_bumps(visits()), find_bumps(visits(*sequence(0, "rt")))
    assert len(empty) == 0
    assert list(empty) == list(full)


def test_impulses_are_kept() -> None:
    """Bumps hold the impulses of all visits but the block's, those between pushers twice."""
    table = visits(*sequence(0, "rr1tb"), *sequence(1, "tbr", 10.0), (-1, "top", 20.0))
    bumps = find_bumps(table)
    assert bumps["impact_Ns"].sum() == len(table) - 1 + 1


# ---- laps ---------------------------------------------------------------------------------------------------------

LAP = ("rear", "top", "bottom")


def laps_of(letters: str, *cycles: tuple[str, ...]) -> list[tuple[float, float]]:
    """Start and end of the laps found in one pusher's visits."""
    laps = find_completed_laps(find_bumps(visits(*sequence(0, letters))), cycles)
    return list(zip(laps["t_start_s"], laps["t_end_s"], strict=True))


def test_laps_go_from_strike_to_strike() -> None:
    """A lap begins with a strike and ends with the strike that closes it."""
    assert laps_of("rtbrtbr", LAP) == [(0.0, 3.0), (3.0, 6.0)]


@pytest.mark.parametrize("letters", ["rtb", "tbr", "rbtr", "rtnbr", "rt1br", "frtb", ""])
def test_what_is_no_lap(letters: str) -> None:
    """An unfinished lap, another order and a bump in between make no lap."""
    assert laps_of(letters, LAP) == []


def test_lost_and_found_again() -> None:
    """Only whole laps count between losing the lap and catching it again."""
    assert laps_of("trtbrtnbtrtbrb", LAP) == [(1.0, 4.0), (9.0, 12.0)]


def test_a_rebound_does_not_break_a_lap() -> None:
    """Several visits to a surface of the lap are one bump of it, and the lap goes on."""
    assert laps_of("rrttbbr", LAP) == [(0.0, 6.0)]


def test_laps_of_two_pushers_do_not_mix() -> None:
    """A lap is one pusher's: the bumps of two do not add up to one."""
    bumps = find_bumps(visits(*sequence(0, "rtb"), *sequence(1, "rtbr", 5.0)))
    laps = find_completed_laps(bumps, [LAP])
    assert laps["pusher"].tolist() == [1]


def test_laps_with_two_strikes() -> None:
    """A lap that strikes twice is found as a whole, from the strike with which the plan begins it."""
    double = ("rear", "top", "rear", "bottom")
    laps = find_completed_laps(find_bumps(visits(*sequence(0, "rtrbrtrbr"))), [double])
    assert laps["t_start_s"].tolist() == [0.0, 4.0]
    assert laps["n_strikes"].tolist() == [2, 2]


def test_no_laps() -> None:
    """Without bumps or without planned laps the table is empty and has its columns and kinds."""
    for bumps, cycles in ((visits(), [LAP]), (visits(*sequence(0, "rtbr")), [])):
        laps = find_completed_laps(find_bumps(bumps), cycles)
        assert len(laps) == 0
        assert {name: laps[name].dtype for name in laps} == LAP_COLUMNS


def test_the_same_lap_planned_twice_counts_once() -> None:
    """Two planned laps over the same surfaces, as from two stages of a routine, do not count a lap twice."""
    assert laps_of("rtbr", LAP, LAP) == [(0.0, 3.0)]


def test_planned_double_bumps_are_one_bump() -> None:
    """A lap in which the point world bumps again at once into a surface is found among the bumps, where that is one."""
    assert laps_of("rtbrtbr", ("rear", "top", "top", "bottom", "bottom")) == [(0.0, 3.0), (3.0, 6.0)]
    assert laps_of("rtbr", ("rear", "rear", "top", "bottom")) == [(0.0, 3.0)]
    assert laps_of("rtbr", ("rear", "top", "bottom", "rear")) == [(0.0, 3.0)]


@pytest.mark.parametrize(
    "cycles",
    [
        (LAP, LAP + LAP),  # one planned lap is another one gone round twice
        (("rear", "top", "top", "bottom", "rear", "top", "bottom"),),  # and so is this one, double bumps taken as one
        (("rear", "top", "rear", "bottom"), ("rear", "bottom", "rear", "top")),  # the same lap from its other strike
    ],
)
def test_no_time_counts_twice(cycles: tuple[tuple[str, ...], ...]) -> None:
    """The laps of one pusher do not overlap in time, so that they never take more than all of it."""
    for letters in ("rtbrtbrtbr", "rtrbrtrbrtrbr"):
        laps = sorted(laps_of(letters, *cycles))
        assert all(before[1] <= after[0] for before, after in pairwise(laps))
