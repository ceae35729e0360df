"""Order, limit and grid convergence index against published tables and manufactured sequences."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from swarmpush.auditing.grid_index import Behaviour, grid_index

# I. B. Celik et al., J. Fluids Eng. 130 (2008) 078001, Table 1: values from fine to coarse, ratios of the cell sizes,
# and the printed p, extrapolated value, approximate and extrapolated relative error and index in percent. The first
# column's second ratio is printed as 1.333; cut to that, the order would move in its last printed digit.
CELIK = {
    "reattachment length": ((6.063, 5.972, 5.863), (1.5, 4 / 3), (1.53, 6.1685, 1.5, 1.7, 2.2)),
    "axial velocity, monotone": ((10.7880, 10.7250, 10.6050), (2.0, 2.143), (0.75, 10.8801, 0.6, 0.9, 1.1)),
    "axial velocity, oscillating": ((6.0042, 5.9624, 6.0909), (2.0, 2.143), (1.51, 6.0269, 0.7, 0.4, 0.5)),
}
PRINTED = 0.055  # percent: one decimal is printed, and 0.847 stands there as 0.9, rounded by way of 0.85


@pytest.mark.parametrize("name", CELIK)
def test_celiks_table(name: str) -> None:
    """All three columns of the table come out, to the digits printed."""
    values, (r21, r32), (order, limit, error, limit_error, index) = CELIK[name]
    found = grid_index(*values, r21=r21, r32=r32)
    assert round(found.order, 2) == order
    assert found.limit == pytest.approx(limit, abs=0.6e-4)  # four decimals printed
    assert 100 * found.error_rel == pytest.approx(error, abs=PRINTED)
    assert 100 * found.limit_error_rel == pytest.approx(limit_error, abs=PRINTED)
    assert 100 * found.index_rel == pytest.approx(index, abs=PRINTED)
    expected = Behaviour.OSCILLATING if "oscillating" in name else Behaviour.MONOTONE
    assert found.behaviour is expected


def test_pressure_recovery_of_an_inlet() -> None:
    """The three-grid example of NASA's tutorial on grid convergence: p = 1.786170, limit 0.971300, index 0.103083 %.

    Source: NPARC Alliance, "Examining Spatial (Grid) Convergence" (digits from memory).
    """
    found = grid_index(0.97050, 0.96854, 0.96178)
    assert found.order == pytest.approx(1.786170, abs=1e-6)  # digits printed
    assert found.limit == pytest.approx(0.971300, abs=1e-6)
    assert 100 * found.index_rel == pytest.approx(0.103083, abs=1e-6)


@given(
    order=st.floats(0.3, 4.0),
    limit=st.floats(-10.0, 10.0),
    error=st.floats(0.01, 1.0) | st.floats(-1.0, -0.01),
    r21=st.floats(1.2, 3.0),
    r32=st.floats(1.2, 3.0),
)
def test_a_manufactured_sequence(order: float, limit: float, error: float, r21: float, r32: float) -> None:
    """Values limit + error h^order give back order and limit, whatever the ratios of the steps."""
    fine, middle, coarse = (limit + error * h**order for h in (1.0, r21, r21 * r32))
    found = grid_index(fine, middle, coarse, r21=r21, r32=r32)
    assert found.behaviour is Behaviour.MONOTONE
    assert found.order == pytest.approx(order, rel=1e-6)  # differences of rounded numbers near 10
    assert found.limit == pytest.approx(limit, abs=1e-6)
    assert found.uncertainty == pytest.approx(1.25 * abs(error), rel=1e-5)


@pytest.mark.parametrize("order", [1.0, 2.0])
def test_order_of_halved_steps(order: float) -> None:
    """For halved steps the order is log2 of the differences' ratio."""
    fine, middle, coarse = (3.0 + 0.1 * h**order for h in (0.25, 0.5, 1.0))
    found = grid_index(fine, middle, coarse)
    assert found.order == pytest.approx(math.log2((coarse - middle) / (middle - fine)), abs=1e-9)
    assert found.order == pytest.approx(order, abs=1e-9)
    assert found.limit == pytest.approx(3.0, abs=1e-12)


def test_differences_that_alternate() -> None:
    """Alternating differences that halve have order 1 by size, and are called oscillating."""
    found = grid_index(1.0, 1.1, 0.9)
    assert found.behaviour is Behaviour.OSCILLATING
    assert found.order == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("values", [(1.0, 1.2, 1.3), (1.0, 1.2, 1.1), (1.0, 1.2, 1.2), (1.0, 1.1, 1.2)])
def test_differences_that_do_not_shrink(values: tuple[float, float, float]) -> None:
    """Where the differences do not shrink there is no order above 0, no limit and no finite index."""
    found = grid_index(*values)
    assert found.behaviour is Behaviour.GROWING
    assert found.order <= 1e-12
    assert math.isnan(found.limit)
    assert found.uncertainty == found.index_rel == math.inf


@pytest.mark.parametrize("value", [0.0, 1.0, -3e-9, 1e12])
def test_values_equal_to_rounding(value: float) -> None:
    """Values that differ by rounding alone are settled: no order, and an index at rounding level."""
    found = grid_index(value, value * (1 + 2e-16), value * (1 - 4e-16))
    assert found.behaviour is Behaviour.SETTLED
    assert math.isnan(found.order)
    assert found.limit == value
    assert found.uncertainty <= 1e-15 * abs(value)


def test_finer_two_equal() -> None:
    """Two equal values prove no order; the index keeps the difference that was seen."""
    found = grid_index(2.0, 2.0, 2.4)
    assert found.behaviour is Behaviour.SETTLED
    assert found.uncertainty == pytest.approx(1.25 * 0.4)


def test_a_value_of_zero_has_no_relative_error() -> None:
    """Nothing is relative to 0, while order and uncertainty are there."""
    found = grid_index(0.0, 0.1, 0.3)
    assert math.isnan(found.error_rel)
    assert math.isnan(found.index_rel)
    assert found.order == pytest.approx(1.0)
    assert found.uncertainty == pytest.approx(0.125)


@pytest.mark.parametrize(
    ("values", "ratio"),
    [((1.0, math.nan, 2.0), 2.0), ((1.0, 2.0, math.inf), 2.0), ((1.0, 2.0, 4.0), 1.0), ((1.0, 2.0, 4.0), math.nan)],
)
def test_what_makes_no_sense_is_refused(values: tuple[float, float, float], ratio: float) -> None:
    """Values that are not finite and ratios that are not above 1 are refused."""
    with pytest.raises(ValueError, match="given"):
        grid_index(*values, r21=ratio)
