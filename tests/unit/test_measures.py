"""Measures of a run against what a plan takes for granted, on tables made by hand."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

from swarmpush.dynamics import measures
from swarmpush.dynamics.bumps import lap_rows
from swarmpush.kinematics.laps import Lap

HEADING, LOW, HIGH = 0.1, -0.2, 0.3  # rad: of the lap at the rear face, and the errors that keep it
EXACT = 1e-12


def lap(heading: float = HEADING) -> Lap:
    return Lap(
        surfaces=("rear", "top", "bottom"),
        hits=np.zeros((3, 4)),
        n_rear=1,
        length_m=1.0,
        time_s=3.0,
        multipliers=(0j, 0j),
        rear_y_m=0.1,
        rear_heading_rad=heading,
        leg_bands_rad=((-1.0, 1.0), (-1.0, 1.0), (LOW, HIGH)),
        share=1.0,
    )


def bumps(pusher: int, letters: str, *headings: float) -> pd.DataFrame:
    """Bumps one second apart (r rear, t top, b bottom, p a pusher); headings and y (10, 11, ...) of the strikes."""
    names = {"r": "rear", "t": "top", "b": "bottom", "p": "pusher"}
    left, rows = list(headings), []
    for k, letter in enumerate(letters):
        heading = left.pop(0) if letter == "r" and left else 0.0
        n_before = letters[:k].count("r")
        rows.append((pusher, names[letter], float(k), 10.0 + n_before, heading))
    return pd.DataFrame(rows, columns=["pusher", "surface", "t_on_s", "y_m", "heading_rad"])


# ---- strikes at the ends of laps -----------------------------------------------------------------------------------


def ends_of(table: pd.DataFrame, of: Lap) -> pd.DataFrame:
    return measures.lap_ends(table, of, lap_rows(table, (of.surfaces,)))


def in_band(table: pd.DataFrame, of: Lap) -> float:
    return measures.share_in_band(table, of, lap_rows(table, (of.surfaces,)))


def test_ends_of_laps() -> None:
    """A pass has the deviations of its first and its last strike, and the place of its last."""
    ends = ends_of(bumps(4, "rtbrtbr", 0.1, 0.15, 0.3), lap())
    assert ends["pusher"].tolist() == [4, 4]
    assert ends["y_m"].tolist() == [11.0, 12.0]
    assert ends["before_rad"].tolist() == pytest.approx([0.0, 0.05], abs=EXACT)
    assert ends["after_rad"].tolist() == pytest.approx([0.05, 0.2], abs=EXACT)


def test_strikes_of_other_routes_end_no_lap() -> None:
    """A strike that another route led to is in no pass, and a pass is not made of two pushers' bumps."""
    assert len(ends_of(bumps(0, "rbtrbtr"), lap())) == 0
    assert len(ends_of(pd.concat([bumps(0, "rtb"), bumps(1, "rt")]), lap())) == 0


def test_deviations_are_within_half_a_turn() -> None:
    """Headings on either side of a half turn differ by little."""
    ends = ends_of(bumps(0, "rtbr", 3.1, -3.1), lap(3.1))
    assert ends["after_rad"].tolist() == pytest.approx([2 * math.pi - 6.2], abs=EXACT)


def paired(pusher: int, before: list[float], after: list[float]) -> pd.DataFrame:
    return pd.DataFrame({"pusher": pusher, "y_m": 0.0, "before_rad": before, "after_rad": after})


def test_growth_of_halved_deviations() -> None:
    """A deviation that halves from strike to strike has the slope 1/2, and 12 pairs make it (1/2 + 1/12)/(1 - 3/12)."""
    values = [2.0**-k for k in range(13)]
    assert measures.heading_growth(paired(0, values[:-1], values[1:])) == pytest.approx(7 / 9, abs=EXACT)


def test_growth_is_about_each_pushers_own_mean() -> None:
    """Pushers whose headings differ for good do not look as if errors were kept: slope 0, made (3/12)/(1 - 5/12)."""
    before, after = [1.0, -1.0, 1.0, -1.0], [1.0, 1.0, -1.0, -1.0]
    ends = [paired(k, [b + 9 * k for b in before], [a + 9 * k for a in after]) for k in range(3)]
    assert measures.heading_growth(pd.concat(ends)) == pytest.approx(3 / 7, abs=EXACT)


@pytest.mark.parametrize("growth", [0.0, 0.5, -0.5])
def test_growth_is_unbiased(growth: float) -> None:
    """Over many short series of three pushers the mean is the factor they were made with; without correction it is
    off by 0.06 and more."""
    rng, found = np.random.default_rng(1), []
    for _ in range(150):
        ends = []
        for k in range(3):
            x = [rng.normal() / math.sqrt(1 - growth**2)]
            for _ in range(12):
                x.append(growth * x[-1] + rng.normal())
            ends.append(paired(k, x[:-1], x[1:]))
        found.append(measures.heading_growth(pd.concat(ends)))
    assert np.mean(found) == pytest.approx(growth, abs=0.045)  # 3 standard errors: 3 x 0.17/sqrt(150), and a rest


def test_growth_needs_pairs_and_scatter() -> None:
    """Eleven pairs are too few, a pusher with two is left out, and headings that are all alike have no slope."""
    zigzag = 6 * [1.0, -1.0]
    assert math.isnan(measures.heading_growth(paired(0, zigzag[:11], zigzag[:11])))
    few = pd.concat([paired(0, zigzag[:10], zigzag[:10]), paired(1, zigzag[:2], zigzag[:2])])
    assert math.isnan(measures.heading_growth(few))
    assert math.isnan(measures.heading_growth(paired(0, [0.3] * 12, zigzag)))
    assert not math.isnan(measures.heading_growth(paired(0, zigzag, zigzag)))


def test_growth_does_not_hang_on_single_strikes() -> None:
    """Where a quarter of the headings are off and the rest alike there is no slope, with one more there is."""
    after = 6 * [0.0, 0.1]
    assert math.isnan(measures.heading_growth(paired(0, 3 * [1.0] + 9 * [0.3], after)))
    assert not math.isnan(measures.heading_growth(paired(0, 4 * [1.0] + 8 * [0.3], after)))


@pytest.mark.parametrize(
    ("letters", "headings", "share"),
    [
        ("rtbrtbrtbr", (0.1, 0.1, 0.1, 0.1), 1.0),  # the first strike has closed no lap, the next two lead to another
        ("rtbrtbr", (0.1, 0.1, 0.1 + HIGH + 0.01), 0.0),  # beyond the band
        ("rtbrtbr", (0.1, 0.1, 0.1 + HIGH - 0.01), 1.0),
        ("rtbrtbrtbr", (0.1, 0.1, 0.1 + LOW - 0.01, 0.1), 0.5),
        ("rtbrbr", (0.1, 0.1, 0.1), 0.0),  # another route
        ("rtbrtpbr", (0.1, 0.1, 0.1), math.nan),  # disturbed: not counted
        ("rtbrtpbrtbrtbr", (0.1, 0.1, 0.1, 0.1, 0.1), 1.0),  # and neither is the first lap after it
        ("rtbrtb", (0.1, 0.1), math.nan),  # not over yet
        ("rtb", (0.1,), math.nan),
    ],
)
def test_share_in_band(letters: str, headings: tuple[float, ...], share: float) -> None:
    """Strikes after one that has closed the lap count, kept if by its route and in its band."""
    assert in_band(bumps(0, letters, *headings), lap()) == pytest.approx(share, nan_ok=True)


def test_share_in_band_goes_by_pusher() -> None:
    """A pusher's last strike is not continued by the next one's first."""
    table = pd.concat([bumps(0, "rtbr", 0.1, 0.1), bumps(1, "rtbr", 0.1, 0.1)])
    assert math.isnan(in_band(table, lap()))


# ---- block and crew ------------------------------------------------------------------------------------------------


def path(**columns: list[float]) -> pd.DataFrame:
    n = len(next(iter(columns.values())))
    return pd.DataFrame({"t_s": [float(k) for k in range(n)]} | columns)


def touches(*rows: tuple[int, str, str, float, float]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=["pusher", "partner", "surface", "t_on_s", "t_off_s"])


def test_block_that_moves_alone() -> None:
    """Counted are rows in which the block is faster than a hundredth of the free speed and in touch with no pusher."""
    block = path(vx_m_s=[1.0, 0.5, 0.5, 0.005, -0.5])  # the first row is the start
    none = touches()
    assert measures.moving_alone_share(block, none, 1.0) == 0.75
    assert measures.moving_alone_share(block, none, 0.1) == 1.0
    assert measures.moving_alone_share(block, touches((0, "block", "rear", 0.5, 1.5)), 1.0) == 0.5
    overlapping = touches((0, "block", "rear", 0.5, 3.0), (1, "block", "front", 1.0, 2.5))
    assert measures.moving_alone_share(block, overlapping, 1.0) == 0.25


def test_touches_of_others_do_not_count() -> None:
    """A touch of walls, of a further block, or of the block with a wall leaves the block alone."""
    block = path(vx_m_s=[0.0, 1.0])
    others = touches((0, "wall", "top", 0.5, 2.0), (0, "block", "block 2", 0.5, 2.0), (-1, "block", "rear", 0.5, 2.0))
    assert measures.moving_alone_share(block, others, 1.0) == 1.0
    assert math.isnan(measures.moving_alone_share(block[:1], others, 1.0))


def test_yaw() -> None:
    """Root of the mean square; a full turn is none."""
    assert measures.yaw_rms(path(yaw_rad=[0.0, 0.3, -0.3, 0.3])) == pytest.approx(0.3 * math.sqrt(0.75))
    assert measures.yaw_rms(path(yaw_rad=[2 * math.pi, -2 * math.pi])) == pytest.approx(0.0, abs=EXACT)


def test_reacting_and_turning() -> None:
    """Both count, sliding and standing do not, and neither does the start."""
    crew = pd.DataFrame(
        {"t_s": [0.0, 0.0, 1.0, 1.0, 2.0, 2.0], "mode": ["turn", "turn", "react", "run", "slide", "stop"]}
    )
    assert measures.reacting_share(crew) == 0.25
    crew.loc[3, "mode"] = "turn"
    assert measures.reacting_share(crew) == 0.5
    assert math.isnan(measures.reacting_share(crew[:2]))


def test_strong_pushes() -> None:
    """Strong time over leaning time, rows counted by how long they lasted."""
    block = pd.DataFrame({"t_s": [0.0, 1.0, 4.0], "leaning_share": [0.0, 1.0, 0.5], "strong_share": [0.0, 1.0, 0.0]})
    assert measures.strong_share(block) == pytest.approx(1.0 / 2.5)
    assert math.isnan(measures.strong_share(block.assign(leaning_share=0.0)))


def test_bumps_between_pushers() -> None:
    """Two of the eight bumps are into a pusher."""
    assert measures.bumps_between_pushers(pd.concat([bumps(0, "rptb"), bumps(1, "rptb")])) == 0.25
    assert math.isnan(measures.bumps_between_pushers(bumps(0, "r")[:0]))
