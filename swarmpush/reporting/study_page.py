"""What stands in the report of a study."""

from __future__ import annotations

from itertools import combinations
from typing import Any

from swarmpush.auditing.demands import read_demand
from swarmpush.auditing.survival import log_rank
from swarmpush.cautions import CAUTIONS
from swarmpush.demos import STUDY_DEMOS, study_demo
from swarmpush.output import provenance
from swarmpush.reporting import study_drawing
from swarmpush.reporting.study_figures import study_exhibits
from swarmpush.reporting.study_words import advice_words, failure_rows, point_rows, summary_words, weight_rows
from swarmpush.studies.study import Study
from swarmpush.studies.sweep import StudyResult

MOST_ROWS = 500  # of a table on the page
WEIGHTS = {
    "key": "key", "total": "total", "total interval": "interval", "first": "first order", "first interval": "interval",
    "mu_star": "mean size", "mu_star interval": "interval", "mu": "mean", "sigma": "scatter", "chance": "by chance",
}  # fmt: skip


def study_content(result: StudyResult) -> dict[str, Any]:
    """All that the page shows."""
    study, origin = result.study, provenance(result.study.base, seed=result.study.seed)
    rows = point_rows(result, MOST_ROWS)
    demand = study.demand
    return {
        "name": study.name,
        "kind": "study",
        "note": study.note,
        "answer": result.answer,
        "progress": summary_words(result.summary),
        "confidence": f"{100 * result.confidence:.3g}%",
        "figures": study_exhibits(result),
        "outputs": [_output(result, output) for output in study.outputs],
        "has_lines": study.design in ("grid", "list"),
        "has_map": study_drawing.is_map(result),
        "demand": demand,
        "demanded": _title(read_demand(demand).name) if demand else "",
        "group_test": _group_test(result),
        "rows": rows,
        "row_keys": list(rows[0]) if rows else [],
        "n_points": len(study.points),
        "failures": failure_rows(result.failures.head(MOST_ROWS), study),
        "n_failures": len(result.failures),
        "command": f"swarmpush sweep {study_word(study)}",
        "provenance": [
            ("study hash", study.digest()),
            ("scenario hash of the base", origin["scenario_hash"]),
            ("seed", str(study.seed)),
            ("design", study.design),
            ("versions", ", ".join(f"{name} {number}" for name, number in origin["versions"].items())),
            ("platform", origin["platform"]),
        ],
        "cautions": CAUTIONS,
    }


def study_word(study: Study) -> str:
    """The demo study which this is; else a file's name to be put in."""
    from swarmpush.studies.study_file import load_study

    for name in STUDY_DEMOS:
        path = study_demo(name)
        if study.name in path.read_text(encoding="utf-8") and load_study(path).digest() == study.digest():
            return name
    return "STUDY.toml"


def _output(result: StudyResult, output: str) -> dict[str, Any]:
    rows = weight_rows(result, output)
    keys = list(rows[0]) if rows else []
    return {
        "id": output.replace(" ", "-"),
        "key": output.replace(" ", "_"),
        "name": output,
        "title": _title(output),
        "weights": rows,
        "weight_keys": keys,
        "weight_names": [WEIGHTS[key] for key in keys],
        "advice": advice_words(result, output),
    }


def _title(output: str) -> str:
    return output[:1].upper() + output[1:]


def _group_test(result: StudyResult) -> str:
    """Which groups of runs arrive at different rates, in a sentence: log-rank tests of all pairs, Bonferroni."""
    axis = study_drawing.group_axis(result)
    if axis is None:
        return ""
    groups = {name: runs for name, runs in result.groups(axis).items() if len(runs)}
    pairs = list(combinations(groups, 2))
    told = []
    for first, second in pairs:
        sets = [(runs["duration_s"], ~runs["has_arrived"].astype(bool)) for runs in (groups[first], groups[second])]
        test = log_rank(*sets[0], *sets[1])
        if test.p_value < (1.0 - result.confidence) / len(pairs):
            order = "sooner" if test.z > 0.0 else "later"
            told.append(f"{first} arrives {order} than {second} (p = {test.p_value:.2g})")
    if not pairs:
        return ""
    lead = f"Log-rank tests by {axis.name}, corrected for {len(pairs)} comparisons: "
    return lead + ("; ".join(told) if told else "no two groups arrive at rates that differ beyond chance") + "."
