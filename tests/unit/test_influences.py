"""What measured values do to the block's speed, against the laws of impact and sliding friction."""

from __future__ import annotations

import math

import pytest
from faulty_rigs import ideal

import swarmpush
from swarmpush.auditing.neighbours import Influence

# Thirty to forty strikes in a run, whose number is whole, and a first lap that starts anywhere: one strike more or less
# is some 3 % of the speed, against a change of 25 % of the value either way.
COUNTING = 0.15


@pytest.fixture(scope="module")
def found() -> dict[str, Influence]:
    s = ideal().replace(goal={"time_limit": 150.0, "travel": 0.3})
    return {one.key: one for one in swarmpush.audit(s, replicates=3, around=True).influences}


def slope(law: object, reach: float) -> float:
    """(law(1 + h) - law(1 - h))/2h of a speed relative to that as given."""
    assert callable(law)
    return float((law(1.0 + reach) - law(1.0 - reach)) / (2.0 * reach))


def relative(one: Influence) -> float:
    """The change of the speed relative to the speed; precision = tolerance speed/change."""
    speed = one.precision * abs(one.change_m_s.mean) / 0.1
    return one.change_m_s.mean / speed


def test_speed_and_masses(found: dict[str, Influence]) -> None:
    """A nudge is J^2/(2 M^2 mu g) with J = (1 + e) v m M/(m + M), and laps take a time in proportion to 1/v.

    Newton's law of restitution and Coulomb's law, as in any textbook of mechanics (derived here): the block's speed
    goes as v^3 and as (m/(m + M))^2.
    """
    s = ideal()
    m, big, e = s.pushers.mass, s.block.mass, s.contacts.pusher_block.restitution
    laws = {
        "pushers.free_speed": lambda x: x**3,
        "pushers.mass": lambda x: (x * (m + big) / (x * m + big)) ** 2,
        "block.mass": lambda x: ((m + big) / (m + x * big)) ** 2,
        "contacts.pusher_block.restitution": lambda x: ((1.0 + x * e) / (1.0 + e)) ** 2,
    }
    for key, law in laws.items():
        assert relative(found[key]) == pytest.approx(slope(law, found[key].reach), rel=COUNTING, abs=COUNTING), key
        assert found[key].is_seen or key.startswith("contacts"), key


def test_what_the_law_does_not_hold(found: dict[str, Influence]) -> None:
    """The stall force only brings a cart up to speed, and the inertia of a block on a rail does nothing."""
    assert relative(found["pushers.stall_force"]) == pytest.approx(0.0, abs=COUNTING)
    inertia = found["block.yaw_inertia"]
    assert (inertia.change_m_s.mean, inertia.precision, inertia.is_seen) == (0.0, math.inf, False)
