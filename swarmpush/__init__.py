"""swarmpush: does a crowd of blind pushers really move the block along the channel?

    scenario = swarmpush.load("rig.toml")
    plan = swarmpush.plan(scenario)          # point world: laps, stability, forecast
    run = swarmpush.simulate(scenario, seed=1)  # body world: contacts, friction, inertia, books
    audit = swarmpush.audit(scenario)        # which assumptions hold, and what each costs

Everything is imported on first use, so that `import swarmpush` is quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from swarmpush.auditing.audit import Audit, audit
    from swarmpush.auditing.converge import Convergence, converge
    from swarmpush.demos import demo, study_demo
    from swarmpush.dynamics.attached import Crew
    from swarmpush.dynamics.drive import Drive
    from swarmpush.dynamics.plugin import attach
    from swarmpush.dynamics.run import Run
    from swarmpush.dynamics.steps import Units
    from swarmpush.dynamics.world import simulate
    from swarmpush.kinematics.basins import basin_map
    from swarmpush.kinematics.cycle_map import cycle_map
    from swarmpush.kinematics.planning import Plan, plan
    from swarmpush.loading import load, loads
    from swarmpush.problems import ScenarioError
    from swarmpush.reporting.page import report
    from swarmpush.scenario import Scenario
    from swarmpush.studies.study import Study
    from swarmpush.studies.study_file import load_study
    from swarmpush.studies.sweep import StudyResult, load_sweep, sweep
    from swarmpush.vary import with_value
    from swarmpush.viewing.app import watch
    from swarmpush.viewing.film import Film, record
    from swarmpush.viewing.to_file import export_film

__all__ = [
    "Audit",
    "Convergence",
    "Crew",
    "Drive",
    "Film",
    "Plan",
    "Run",
    "Scenario",
    "ScenarioError",
    "Study",
    "StudyResult",
    "Units",
    "attach",
    "audit",
    "basin_map",
    "converge",
    "cycle_map",
    "demo",
    "export_film",
    "load",
    "load_study",
    "load_sweep",
    "loads",
    "plan",
    "record",
    "report",
    "simulate",
    "study_demo",
    "sweep",
    "watch",
    "with_value",
]

_HOME = {
    "Audit": "swarmpush.auditing.audit",
    "Crew": "swarmpush.dynamics.attached",
    "Drive": "swarmpush.dynamics.drive",
    "Convergence": "swarmpush.auditing.converge",
    "Plan": "swarmpush.kinematics.planning",
    "Run": "swarmpush.dynamics.run",
    "Scenario": "swarmpush.scenario",
    "ScenarioError": "swarmpush.problems",
    "Units": "swarmpush.dynamics.steps",
    "attach": "swarmpush.dynamics.plugin",
    "audit": "swarmpush.auditing.audit",
    "basin_map": "swarmpush.kinematics.basins",
    "converge": "swarmpush.auditing.converge",
    "cycle_map": "swarmpush.kinematics.cycle_map",
    "demo": "swarmpush.demos",
    "load": "swarmpush.loading",
    "loads": "swarmpush.loading",
    "plan": "swarmpush.kinematics.planning",
    "report": "swarmpush.reporting.page",
    "simulate": "swarmpush.dynamics.world",
    "Study": "swarmpush.studies.study",
    "StudyResult": "swarmpush.studies.sweep",
    "load_study": "swarmpush.studies.study_file",
    "load_sweep": "swarmpush.studies.sweep",
    "study_demo": "swarmpush.demos",
    "sweep": "swarmpush.studies.sweep",
    "Film": "swarmpush.viewing.film",
    "export_film": "swarmpush.viewing.to_file",
    "record": "swarmpush.viewing.film",
    "watch": "swarmpush.viewing.app",
    "with_value": "swarmpush.vary",
}


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("swarmpush")
    if name in _HOME:
        value = getattr(import_module(_HOME[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'swarmpush' has no attribute '{name}'")
