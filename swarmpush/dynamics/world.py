"""The body world's entrance: a scenario and a seed go in, the record of a run comes out."""

from __future__ import annotations

from collections.abc import Callable

from swarmpush.dynamics.asking import Decide
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.simulation import Simulation
from swarmpush.dynamics.steps import StepSettings
from swarmpush.scenario import Scenario

Progress = Callable[[float], None]

CHUNK = 20_000  # steps between two reports of progress; some tenths of a second


def simulate(
    s: Scenario,
    *,
    seed: int | None = None,
    steps: StepSettings | None = None,
    cycles: tuple[tuple[str, ...], ...] | None = None,
    decide: Decide | None = None,
    progress: Progress | None = None,
) -> Run:
    """Run a scenario with rigid bodies, contact, friction and inertia until goal, time limit or break-off.

    Arguments:
        s: the scenario.
        seed: of starts, errors and unit spreads; the scenario's own unless given.
        steps: solver settings; chosen from the scenario unless given.
        cycles: surfaces of the laps to recognise; those of the plan unless given.
        decide: a Python function that stands in for the scenario's routine; see `asking.Asker` for what it is given and
            what it answers. It is called at decision moments only, some 40 microseconds each beside its own time.
        progress: called now and then with the share of the time limit that is done, 0 to 1.

    Returns:
        A `Run`; the same scenario, seed and versions give the same tables, bit by bit.

    Raises:
        RoutineError: when `decide` gives an answer that cannot be carried out.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 2.0})
    >>> swarmpush.simulate(s, seed=7).ended
    'time'
    """
    simulation = Simulation(s, seed=seed, steps=steps, cycles=cycles, decide=decide)
    while not simulation.is_over:
        simulation.advance(CHUNK)
        if progress:
            progress(simulation.share)
    return simulation.run()
