"""A lone pusher's run follows the step in first order or better."""

from __future__ import annotations

import pytest
from rigs import PUSH_ON, dry, pair, placed, rig

import swarmpush
from swarmpush.auditing.grid_index import Behaviour
from swarmpush.auditing.step_effect import Effect
from swarmpush.demos import demo
from swarmpush.scenario import Errors

# The engine moves positions with the velocity of the step before, which alone would be first order. For one blow on a
# resting block the error of the floor's pull in that step is made to cancel it, so that the second order is left.
ORDER = (1.9, 2.1)
THIRD_ORDER = 0.1  # of a difference of second order: the step is 1/20 of the relaxation time, and a few times that


@pytest.mark.parametrize("start", [3.0, 3.0137, 3.05])
def test_a_block_struck_head_on(start: float) -> None:
    """A block that one elastic blow sends sliding over a dry floor goes a way of order 2 in the step.

    The contact begins with the first step that finds an overlap, up to one step late, and that delay jumps about from
    step to step. It does not matter here: the pusher has long had its free speed, so that the blow is the same
    whenever it comes, and the block has come to rest well before the time is up.
    """
    s = rig(
        floor=dry(0.02),
        pushers={"stall_force": 2.0},
        contacts={"pusher_block": pair(1.0)},
        start=placed((start, 0.5, 0.0)),
        goal={"time_limit": 4.0, "travel": 3.0},
    )
    found = swarmpush.converge(s)
    speed = found.effects[0]
    assert found.has_limit
    assert speed.effect is Effect.SMALL
    assert speed.grid is not None
    assert speed.grid.behaviour is Behaviour.MONOTONE
    assert ORDER[0] < speed.grid.order < ORDER[1]
    _, middle, fine = (mean.mean for mean in speed.at_steps)
    assert abs(4 * fine - middle - 3 * speed.grid.limit) < THIRD_ORDER * abs(fine - middle)


def test_a_push_that_goes_on_hides_the_order() -> None:
    """A block pushed until the time is up gets the delay of the contact in full; the verdict does without an order."""
    s = rig(
        block={"mass": 1.0},
        fluid={"block_drag": 1.0, "block_yaw_drag": 0.1},
        pushers={"latency": PUSH_ON, "stall_force": 1.0},
        start=placed((3.5137, 0.5, 0.0)),
        goal={"time_limit": 3.0, "travel": 3.0},
    )
    found = swarmpush.converge(s)
    speed = found.effects[0]
    assert speed.effect is Effect.SMALL
    step, push = found.settings.dt_s, 2.0  # s: of the three the pusher takes about one to get there
    # the difference is no more than one step's pushing, and the bound three times that
    assert speed.bound < 4.0 * step / push * speed.at_steps[-1].mean


def test_a_lone_cart_on_its_lap() -> None:
    """Without errors and company the demo's carts keep their bumps at every step, which changes no measure by much.

    The contacts' delays differ from start to start and hide the order.
    """
    s = swarmpush.load(demo("service_passage"))
    s = s.replace(pushers={"count": 1}, goal={"time_limit": 60.0}).model_copy(update={"errors": Errors()})
    found = swarmpush.converge(s, replicates=6)
    assert found.is_smooth
    effects = {effect.quantity: effect for effect in found.effects}
    for name in ("block speed", "strike rate", "nudge", "lap time"):
        assert effects[name].effect is Effect.SMALL
    nudge = effects["nudge"]
    assert abs(nudge.difference.mean) < 0.02 * nudge.at_steps[-1].mean  # of 12 steps of sliding, a quarter of one


@pytest.mark.parametrize("name", ["vibration_duct", "loading_bay"])
def test_books_balance_at_every_step(name: str) -> None:
    """Halving the step leaves the books at rounding level, where more steps add more rounding."""
    s = swarmpush.load(demo(name)).replace(goal={"time_limit": 2.0})
    for step in swarmpush.converge(s, replicates=2).steps:
        assert step.residual_rel < 1e-11  # rounding of 1e4 steps, over an impulse that may be small
