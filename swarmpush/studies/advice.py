"""What a sensitivity or a screening means for someone with a rig: what to measure first, and what may stay."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from dataclasses import dataclass
from typing import Any

from swarmpush.auditing.claims import MEASURES
from swarmpush.quantities import for_people
from swarmpush.studies.screening import Screening
from swarmpush.studies.sensitivity import Sensitivity

MUCH_CHANCE = 0.5  # share of the variance; beyond it, runs tell more of chance than of the keys


@dataclass(frozen=True)
class Advice:
    """A key worth measuring. weight, low, high: its total index, or its mu* in SI units of the output."""

    key: str
    weight: float
    low: float
    high: float
    sentence: str


def measure_first(found: Sensitivity | Screening) -> tuple[Advice, ...]:
    """The keys that matter for an output, the most important one first, with a sentence each.

    Keys are ranked by their total index or by mu*. Those whose interval reaches down to none are left out: to no share
    of the variance, or to no more than chance alone would give.
    """
    if isinstance(found, Sensitivity):
        ranked = found.table.sort_values("total", ascending=False, kind="stable").to_dict(orient="records")
        kept = [row for row in ranked if row["total_low"] > 0.0]
        return tuple(
            Advice(row["key"], row["total"], row["total_low"], row["total_high"], _share_sentence(k, row, found.output))
            for k, row in enumerate(kept)
        )
    ranked = found.table.sort_values("mu_star", ascending=False, kind="stable").to_dict(orient="records")
    kept = [row for row in ranked if row["mu_star_low"] > _floor(row["chance"])]
    return tuple(
        Advice(
            row["key"],
            row["mu_star"],
            row["mu_star_low"],
            row["mu_star_high"],
            _effect_sentence(k, row, found.output),
        )
        for k, row in enumerate(kept)
    )


def what_remains(found: Sensitivity | Screening) -> str:
    """In a few sentences what `measure_first` leaves: keys that may stay as they are, and what belongs to no key."""
    named = {advice.key for advice in measure_first(found)}
    others = [key for key in found.table["key"] if key not in named]
    sentences = []
    if others:
        shows = "shows" if len(others) == 1 else "show"
        sentences.append(
            f"{', '.join(others)} {shows} no effect on {found.output} beyond error; within the ranges given a rough "
            "value will do."
        )
    if isinstance(found, Sensitivity):
        sentences += _rest_of_variance(found)
    elif found.table["chance"].isna().all():
        sentences.append("There is one run per point, so that an effect may be chance.")
    return " ".join(sentences)


def _floor(chance: float) -> float:
    return 0.0 if math.isnan(chance) else chance


def _share_sentence(rank: int, row: Mapping[Hashable, Any], output: str) -> str:
    # estimates and their limits can lie beyond all and none, which what they estimate cannot
    names = ("total", "total_low", "total_high", "first")
    total, low, high, alone = (min(max(row[name], 0.0), 1.0) for name in names)
    return (
        f"{_lead(rank, row['key'])}: {total:.0%} ({low:.0%} to {high:.0%}) of the variance of {output} would be "
        f"left if all other keys were known; to know this one alone takes away {alone:.0%}."
    )


def _effect_sentence(rank: int, row: Mapping[Hashable, Any], output: str) -> str:
    unit = MEASURES[output][1]
    size, low, high = (for_people(row[name], unit) for name in ("mu_star", "mu_star_low", "mu_star_high"))
    sentence = f"{_lead(rank, row['key'])}: going through its range changes {output} by {size} ({low} to {high})"
    if abs(row["mu"]) < 0.5 * row["mu_star"]:
        return f"{sentence}, now up, now down."
    return f"{sentence}, mostly {'up' if row['mu'] > 0.0 else 'down'}."


def _lead(rank: int, key: object) -> str:
    return f"Measure {key} first" if rank == 0 else f"Then {key}"


def _rest_of_variance(found: Sensitivity) -> list[str]:
    if not math.isfinite(found.together):
        return [f"{found.output} does not vary over these points." if found.n_rows else "No row of points is complete."]
    sentences = []
    if math.isnan(found.chance.mean):
        sentences.append("There is one run per point, so that the indices hold chance as well.")
    else:
        sentences.append(
            f"{found.chance.mean:.0%} of the variance is chance, and {max(found.together, 0.0):.0%} belongs to several "
            "keys together."
        )
        if found.chance.mean > MUCH_CHANCE:
            sentences.append("More replicates would show the keys better.")
    if found.n_left_out:
        sentences.append(
            f"{found.n_left_out} of {found.n_rows + found.n_left_out} rows are left out, because {found.output} is "
            "undefined at one of their points."
        )
    return sentences
