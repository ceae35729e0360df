"""The figures of a study's report, with their names for those who cannot see them and their data."""

from __future__ import annotations

import pandas as pd

from swarmpush.auditing.claims import ARRIVAL
from swarmpush.reporting import study_drawing
from swarmpush.reporting.figures import Exhibit, exhibit
from swarmpush.reporting.study_words import output_words, weight_rows
from swarmpush.studies.sweep import StudyResult

MOST_TOLD = 12  # points that are named in words; of more, the table tells


def study_exhibits(result: StudyResult) -> dict[str, Exhibit]:
    """The figures by key: response, heat map and weights of each output where it has them, and arrivals over time."""
    draw, found = study_drawing, []
    for output in result.study.outputs:
        name = output.replace(" ", "_")
        alt = _response_alt(result, output)
        found.append(exhibit(f"response_{name}", alt, result.table, draw.response, result, output))
        if study_drawing.is_map(result):
            alt = f"Heat map of {output} over {' and '.join(axis.name for axis in result.study.varied)}."
            found.append(exhibit(f"map_{name}", alt, result.table, draw.heat_map, result, output))
        if (weights := result.weights(output)) is not None:
            alt = _weights_alt(result, output)
            found.append(exhibit(f"weights_{name}", alt, weights.table, draw.weights, result, output))
    if ARRIVAL in result.study.outputs and len(result.runs):
        found.append(exhibit("arrivals", _arrivals_alt(result), arrival_data(result), draw.arrivals, result))
    return {one.key: one for one in found}


def arrival_data(result: StudyResult) -> pd.DataFrame:
    """Share of runs arrived over time, with its interval, by the values of the axis that the picture tells apart."""
    axis = study_drawing.group_axis(result)
    tables = []
    for name, runs in (result.groups(axis) if axis else {"all points": result.runs}).items():
        if len(runs):
            curve = result.under_way(runs)
            shares = {"arrived": curve.share, "arrived_low": curve.high, "arrived_high": curve.low}
            columns = {f"{column}_share": 1.0 - share for column, share in shares.items()}
            tables.append(pd.DataFrame({"group": name, "t_s": curve.times_s, "at_risk_runs": curve.at_risk} | columns))
    return pd.concat(tables, ignore_index=True)


def _response_alt(result: StudyResult, output: str) -> str:
    names = ", ".join(axis.name for axis in result.study.varied)
    if len(result.study.points) > MOST_TOLD:
        return f"{output} over {names}; the numbers of all points stand in the table."
    estimates = result.estimates(output)
    told = [
        f"{result.study.values_at(point)}: {output_words(output, estimate)[0]}"
        for point, estimate in enumerate(estimates)
    ]
    return f"{output} over {names}. {'; '.join(told)}."


def _weights_alt(result: StudyResult, output: str) -> str:
    rows = weight_rows(result, output)
    column = "mu_star" if "mu_star" in rows[0] else "total"
    told = "; ".join(f"{row['key']} {row[column]}" for row in rows)
    return f"What each key does to {output}: {told}."


def _arrivals_alt(result: StudyResult) -> str:
    axis = study_drawing.group_axis(result)
    groups = result.groups(axis) if axis else {"all points": result.runs}
    told = [f"{name} {runs['has_arrived'].mean():.0%}" for name, runs in groups.items() if len(runs)]
    by = f" by {axis.name}" if axis else ""
    return f"Share of runs that have arrived over time{by}; in the end {', '.join(told)}."
