"""Designs, Sobol' indices and elementary effects against functions whose answers are published or known exactly."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.stats import qmc, sobol_indices

from swarmpush.studies.designs import make_points
from swarmpush.studies.screening import Screening, elementary_effects
from swarmpush.studies.sensitivity import Sensitivity, variance_shares
from swarmpush.studies.study import Axis

FloatArray = NDArray[np.float64]

# A. Saltelli et al., Global Sensitivity Analysis: The Primer (2008), chapter 4
ISHIGAMI_FIRST = (0.3139052, 0.4424111, 0.0)
ISHIGAMI_TOTAL = (0.5575889, 0.4424111, 0.2436837)
ISHIGAMI_VARIANCE = 13.8445879
# closed form of A. Saltelli and I. M. Sobol', Reliab. Eng. Syst. Saf. 50 (1995) 225
G_SCALES = np.array([0.0, 1.0, 4.5, 9.0, 99.0, 99.0, 99.0, 99.0])
G_FIRST = (0.716192, 0.179048, 0.023676, 0.007162, *4 * (0.000072,))
G_TOTAL = (0.787144, 0.242198, 0.034317, 0.010460, *4 * (0.000105,))

N_ROWS = 2**14
# At 2^14 rows the half-width of a 95 % bootstrap interval is at most 0.022 (Ishigami's a), and that of a row design of
# Sobol' points errs less than the bootstrap of independent rows thinks
TOLERANCE = 0.01
ROUNDING = 1e-9  # relative; sums of 16 384 terms in another order


def ishigami(x: FloatArray) -> FloatArray:
    y: FloatArray = np.sin(x[:, 0]) + 7 * np.sin(x[:, 1]) ** 2 + 0.1 * x[:, 2] ** 4 * np.sin(x[:, 0])
    return y


def g_function(x: FloatArray) -> FloatArray:
    y: FloatArray = np.prod((np.abs(4 * x - 2) + G_SCALES) / (1 + G_SCALES), axis=1)
    return y


ISHIGAMI_AXES = tuple(Axis(name, low=-np.pi, high=np.pi) for name in "abc")
G_AXES = tuple(Axis(f"x{k}", low=0.0, high=1.0) for k in range(8))


def indices(
    function: Callable[[FloatArray], FloatArray],
    axes: tuple[Axis, ...],
    n: int,
    *,
    seed: int = 1,
    noise: FloatArray | None = None,
) -> Sensitivity:
    points = make_points("sensitivity", axes, n, seed)
    values = function(points.to_numpy())[:, None]
    return variance_shares(values if noise is None else values + noise, [axis.name for axis in axes], "travel")


@pytest.mark.parametrize(
    ("function", "axes", "first", "total"),
    [(ishigami, ISHIGAMI_AXES, ISHIGAMI_FIRST, ISHIGAMI_TOTAL), (g_function, G_AXES, G_FIRST, G_TOTAL)],
    ids=["Ishigami", "Sobol' g"],
)
def test_published_indices(
    function: Callable[[FloatArray], FloatArray],
    axes: tuple[Axis, ...],
    first: tuple[float, ...],
    total: tuple[float, ...],
) -> None:
    """First-order and total indices of two test functions, from our rows of points to our table."""
    found = indices(function, axes, N_ROWS)
    assert found.table["first"].to_numpy() == pytest.approx(first, abs=TOLERANCE)
    assert found.table["total"].to_numpy() == pytest.approx(total, abs=TOLERANCE)
    assert found.together == pytest.approx(1.0 - sum(first), abs=2 * TOLERANCE)  # a sum of errors that partly cancel


def test_variance_of_the_design() -> None:
    """Means and variance of the Ishigami function over a Sobol' design: 3.5 and 13.8445879 (Saltelli et al. 2008)."""
    y = ishigami(make_points("sobol", ISHIGAMI_AXES, N_ROWS, 3).to_numpy())
    standard_error = np.sqrt(ISHIGAMI_VARIANCE / N_ROWS)  # of independent points; Sobol' points are better
    assert y.mean() == pytest.approx(3.5, abs=standard_error)
    assert y.var() == pytest.approx(ISHIGAMI_VARIANCE, rel=0.01)


def test_same_as_scipy() -> None:
    """With one replicate the estimators are those of scipy.stats.sobol_indices, fed with the same values."""
    points = make_points("sensitivity", ISHIGAMI_AXES, 256, 5)
    y = ishigami(points.to_numpy())
    rows = y.reshape(-1, 5)
    theirs = sobol_indices(
        func={"f_A": rows[:, 0][None], "f_B": rows[:, 1][None], "f_AB": rows[:, 2:].T[:, None, :]}, n=256
    )
    ours = variance_shares(y[:, None], list("abc"), "travel").table
    assert ours["first"].to_numpy() == pytest.approx(theirs.first_order, rel=ROUNDING)
    assert ours["total"].to_numpy() == pytest.approx(theirs.total_order, rel=ROUNDING)


@pytest.mark.parametrize("shared_sd", [0.0, 5.0])
def test_chance_is_told_from_the_keys(shared_sd: float) -> None:
    """Noise of known variance gets its share and none of the keys' ones, also where all points share part of it.

    Expected: the published indices times the share that is not chance. Over 60 seeds the indices scatter by 0.014 to
    0.027 and the share of chance by 0.006; three times that is allowed. Uncorrected, the total indices would be wrong
    by the share of chance, 0.30.
    """
    n, replicates, sd = 2048, 3, 4.2
    rng = np.random.default_rng(8)
    noise = rng.normal(0.0, sd, (n * 5, replicates)) + rng.normal(0.0, shared_sd, replicates)
    found = indices(ishigami, ISHIGAMI_AXES, n, noise=noise)
    chance = sd**2 / replicates / (sd**2 / replicates + ISHIGAMI_VARIANCE)
    assert found.chance.mean == pytest.approx(chance, abs=0.02)
    assert found.table["total"].to_numpy() == pytest.approx((1 - chance) * np.array(ISHIGAMI_TOTAL), abs=0.09)
    assert found.table["first"].to_numpy() == pytest.approx((1 - chance) * np.array(ISHIGAMI_FIRST), abs=0.09)


def test_a_key_without_effect() -> None:
    """A key that changes nothing has indices of 0, also under noise that all points share run by run."""
    axes = (*ISHIGAMI_AXES, Axis("idle", low=0.0, high=1.0))
    points = make_points("sensitivity", axes, 256, 2)
    noise = np.random.default_rng(3).normal(0.0, 3.0, 4)
    found = variance_shares(ishigami(points.to_numpy())[:, None] + noise, [axis.name for axis in axes], "travel")
    idle = found.table.set_index("key").loc["idle"]
    assert idle["first"] == pytest.approx(0.0, abs=ROUNDING)
    assert idle["total"] == pytest.approx(0.0, abs=ROUNDING)
    assert found.chance.mean == pytest.approx(0.0, abs=ROUNDING)


def test_rows_with_gaps_are_left_out() -> None:
    """A point without value costs its row, is counted, and the rest stays right."""
    points = make_points("sensitivity", ISHIGAMI_AXES, 4096, 2)
    values = ishigami(points.to_numpy())[:, None]
    gone = np.random.default_rng(1).choice(len(values), 400, replace=False)
    values[gone] = np.nan
    found = variance_shares(values, list("abc"), "travel")
    assert found.n_left_out == len(set(gone // 5))
    assert found.n_rows == 4096 - found.n_left_out
    # the missing rows break the balance of the Sobol' points, so the error is that of random rows: 0.04 at 95 %
    assert found.table["total"].to_numpy() == pytest.approx(ISHIGAMI_TOTAL, abs=0.05)


def test_nothing_varies() -> None:
    """Where the output is the same everywhere, indices are undefined, and no division by rounding passes for one."""
    found = variance_shares(np.full((64 * 5, 2), 0.1), list("abc"), "travel")
    assert found.table.drop(columns="key").isna().to_numpy().all()
    assert np.isnan(found.together)


def test_coverage_of_the_bootstrap() -> None:
    """How often 95 % intervals hold the true indices of the Ishigami function, over 100 designs of 128 rows.

    A percentile bootstrap of a ratio gives 90 to 97 %; rows of scrambled Sobol' points err less than the independent
    rows that the bootstrap imagines, so that most intervals are on the safe side: 91 to 99.5 % over 400 designs. 0.79
    is 4 binomial standard errors (0.029) below 0.91; intervals of half the width would hold them in 2 of 3 cases.
    """
    n_designs = 100
    truth = np.array([*ISHIGAMI_FIRST, *ISHIGAMI_TOTAL])
    hits = np.zeros(6)
    for seed in range(n_designs):
        table = indices(ishigami, ISHIGAMI_AXES, 128, seed=seed).table
        low, high = (table[[f"first_{end}", f"total_{end}"]].to_numpy().T.ravel() for end in ("low", "high"))
        hits += (low <= truth) & (truth <= high)
    assert (hits / n_designs >= 0.79).all(), hits / n_designs


@pytest.mark.parametrize("design", ["latin hypercube", "sobol"])
def test_designs_are_more_even_than_chance(design: str) -> None:
    """Centred discrepancy of a design is below that of all of 20 random samples of its size (scipy.stats.qmc)."""
    axes = [Axis(name, low=0.0, high=1.0) for name in "abcd"]
    ours = qmc.discrepancy(make_points(design, axes, 128, 1).to_numpy())
    random = [qmc.discrepancy(np.random.default_rng(k).random((128, 4))) for k in range(20)]
    assert ours < min(random)


def test_sobol_points_are_more_even_than_a_latin_hypercube() -> None:
    """In two dimensions, of the same size, as known since Sobol' (1967)."""
    axes = [Axis(name, low=0.0, high=1.0) for name in "ab"]
    sobol, cube = (qmc.discrepancy(make_points(d, axes, 256, 1).to_numpy()) for d in ("sobol", "latin hypercube"))
    assert sobol < 0.5 * cube


def test_mean_over_a_latin_hypercube() -> None:
    """Variance of the mean of x over n points is 1/(12 n^3), where random points have 1/(12 n) (derived here).

    1000 designs give a variance with a relative standard error of sqrt(2/1000) = 4.5 %; 4 of them are allowed.
    """
    n = 10
    means = [make_points("latin hypercube", [Axis("x", low=0.0, high=1.0)], n, k)["x"].mean() for k in range(1000)]
    assert np.var(means) == pytest.approx(1 / (12 * n**3), rel=4 * np.sqrt(2 / 1000))


def screened(
    function: Callable[[FloatArray], FloatArray], axes: tuple[Axis, ...], n: int, noise: Any = 0.0
) -> Screening:
    points = make_points("screening", axes, n, 1)
    return elementary_effects(function(points.to_numpy())[:, None] + noise, points, axes, "travel")


def test_effects_of_a_straight_line() -> None:
    """On a linear function mu* is slope times range and sigma 0, whatever the kind of the range."""
    axes = (
        Axis("a", low=-2.0, high=3.0),
        Axis("b", low=1.0, high=4.0, is_whole=True),
        Axis("c", values=(1.0, 2.0, 5.0, 11.0)),
        Axis("d", low=1e-3, high=10.0, is_log=True),
    )
    slopes = np.array([2.0, -3.0, 0.5])
    effects = screened(lambda x: x[:, :3] @ slopes + 7 * np.log10(x[:, 3]), axes, 30).table
    expected = np.array([2.0 * 5, -3.0 * 3, 0.5 * 10, 7 * 4])
    assert effects["mu"].to_numpy() == pytest.approx(expected, rel=ROUNDING)
    assert effects["mu_star"].to_numpy() == pytest.approx(np.abs(expected), rel=ROUNDING)
    assert effects["sigma"].to_numpy() == pytest.approx(0.0, abs=ROUNDING * 28)
    assert (effects["n"] == 30).all()


def test_effects_of_options() -> None:
    """Options have no order: the effect is the change from one to another."""
    axes = (Axis("law", values=("left", "right"), options={"left": {}, "right": {}}), Axis("a", low=0.0, high=1.0))
    points = make_points("screening", axes, 20, 1)
    values = 3.0 * (points["law"] == "right").to_numpy() + points["a"].to_numpy()
    table = elementary_effects(values[:, None], points, axes, "travel").table
    assert table["mu_star"].to_numpy() == pytest.approx([3.0, 1.0], rel=ROUNDING)


def test_effects_order_the_keys() -> None:
    """On the g-function mu* puts the keys in the order of their total indices, and tells those that do nothing."""
    table = screened(g_function, G_AXES, 200).table
    assert list(table["mu_star"].to_numpy()[:4].argsort()[::-1]) == [0, 1, 2, 3]
    assert table["mu_star"][4:].max() < 0.1 * table["mu_star"][2]


def test_effects_of_interplay() -> None:
    """On the Ishigami function b bends (mu near 0) and c acts only together with a: mu* sees both, mu neither.

    With four levels the steps of b lead from sin^2(pi) to sin^2(pi/3) = 3/4 and back, over 2/3 of the range: every
    effect has the size 7 x 3/4 x 3/2 = 7.875 (derived here).
    """
    table = screened(ishigami, ISHIGAMI_AXES, 400).table.set_index("key")
    assert table["mu_star"]["b"] == pytest.approx(7.875, rel=ROUNDING)
    assert (table["mu"].abs()[["b", "c"]] < 0.2 * table["mu_star"][["b", "c"]]).all()
    assert table["mu_star"]["c"] > 5.0
    assert table["sigma"]["c"] > table["mu_star"]["c"]


def test_effects_of_chance() -> None:
    """Where only chance acts, mu* is what is said that chance alone would give.

    It is the mean of 300 sizes of normal deviates, with a relative standard error of sqrt(pi/2 - 1)/sqrt(300) = 4.4 %,
    and chance itself has an error of about 2 %: 4 x 5 % are allowed. The standard deviation from 5 replicates is low by
    6 % on average, which is allowed for.
    """
    noise = np.random.default_rng(4).normal(0.0, 1.0, (300 * 4, 5))
    table = screened(lambda x: np.zeros(len(x)), ISHIGAMI_AXES, 300, noise).table
    assert (table["chance"] / table["mu_star"]).to_numpy() == pytest.approx(0.94, abs=0.2)


def test_effects_without_values() -> None:
    """A step to or from a point without value gives no effect, and the others stay."""
    axes = (Axis("a", low=0.0, high=1.0),)
    points = make_points("screening", axes, 10, 1)
    values = points[["a"]].to_numpy().copy()
    values[[3, 8]] = np.nan
    table = elementary_effects(values, points, axes, "travel").table
    assert isinstance(table, pd.DataFrame)
    assert table["n"][0] == 8
    assert table["mu"][0] == pytest.approx(1.0, rel=ROUNDING)
