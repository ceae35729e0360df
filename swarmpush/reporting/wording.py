"""Numbers as a person reads them, shared by the console and the page."""

from __future__ import annotations

import math
from dataclasses import replace

from swarmpush.auditing.rungs import RungResult
from swarmpush.auditing.statistics import Estimate
from swarmpush.auditing.step_effect import StepMean, two_digits
from swarmpush.auditing.verdicts import Finding
from swarmpush.quantities import for_people, prefix_for

CAUSES = {
    "ahead_of_block": "pushers ahead of the block",
    "held_at_wall": "pushers held at a wall",
    "in_no_lap": "pushers behind the block and in no lap",
    "touching_wall": "pushers in touch with a wall",
    "touching_pusher": "pushers in touch with one another",
    "turning": "pushers turning",
    "halted": "pushers halted",
    "dropped_out": "pushers dropped out",
    "leaning_too_weak_for_floor": "time in which those leaning could not overcome the floor",
    "block_jammed_between_walls": "time in which both walls held the block against enough push",
}

# the same as the reason why a block did not arrive
REASONS = {
    "ahead_of_block": "{share} of the crew's time ahead of the block",
    "held_at_wall": "{share} of the crew's time held at a wall",
    "in_no_lap": "{share} of the crew's time behind the block and in no lap",
    "touching_wall": "{share} of the crew's time in touch with a wall",
    "touching_pusher": "{share} of the crew's time in touch with one another",
    "turning": "{share} of the crew's time spent turning",
    "halted": "{share} of the crew's time halted",
    "dropped_out": "{share} of the crew's time lost by dropping out",
    "leaning_too_weak_for_floor": "in {share} of the time those leaning could not overcome the floor",
    "block_jammed_between_walls": "in {share} of the time both walls held the block against enough push",
}
AT_THE_BLOCK = ("leaning_too_weak_for_floor", "block_jammed_between_walls")  # between thrust and motion
TELLS_LITTLE = ("touching_wall", "turning", "in_no_lap")  # as a reason: parts of any good lap, and the lack of one

STATE_WORDS = {
    "idle": "idle: halted or dropped out",
    "ahead": "ahead of the block",
    "locked": "in a lap of the plan",
    "held at a wall": "held at a wall",
    "lost": "in no lap: on the way to one, or out of it",
}


def number(value: float, unit: str) -> str:
    """A number with its unit; shares as percent."""
    if not math.isfinite(value):
        return "-" if math.isnan(value) else "no limit"
    if unit.startswith("share"):
        return f"{value:.0%}".replace("-0%", "0%")
    if unit.startswith("1"):
        return f"{value:.3g} {unit if unit != '1' else ''}".rstrip()
    return for_people(value, unit)


def share_of(share: float) -> str:
    """A share as percent, small ones with two digits.

    >>> share_of(0.384), share_of(0.0123), share_of(0.0)
    ('38%', '1.2%', '0%')
    """
    if share == 0.0 or not math.isfinite(share):
        return "0%" if share == 0.0 else "-"
    return f"{share:.0%}" if share >= 0.0995 else f"{100 * share:.2g}%"


def signed(value: float, unit: str) -> str:
    """A difference with its sign.

    >>> signed(-3.36e-4, "m/s"), signed(2e-3, "m/s")
    ('-336 µm/s', '+2 mm/s')
    """
    text = number(value, unit)
    return f"+{text}" if value > 0.0 and math.isfinite(value) else text


def interval(estimate: Estimate, unit: str) -> str:
    """The confidence interval of an estimate, both ends with the same prefix."""
    low, high = estimate.low, estimate.high
    if not math.isfinite(low) or not math.isfinite(high):
        return "-"
    if unit.startswith("share"):
        return f"{number(low, unit)} to {number(high, unit)}"
    if unit == "rad":  # people read degrees
        return f"{math.degrees(low):.3g} to {math.degrees(high):.3g} deg"
    factor, prefix = prefix_for(max(abs(low), abs(high)))
    if unit.startswith("1"):  # a ratio or a rate, which take no prefix
        factor, prefix = 1.0, ""
    return f"{low / factor:.3g} to {high / factor:.3g} {prefix}{unit if unit != '1' else ''}".rstrip()


def until(time_s: Estimate) -> str:
    """The interval of a time by which something happens, which may never do.

    >>> until(Estimate(3.0, 1.0, math.inf, 5)), until(Estimate(math.inf, math.inf, math.inf, 5))
    ('1 s or later', 'later than any run')
    """
    if not math.isfinite(time_s.low):
        return "later than any run"
    return interval(time_s, "s") if math.isfinite(time_s.high) else f"{for_people(time_s.low, 's')} or later"


def rung_row(rung: RungResult) -> dict[str, str]:
    """A rung as text."""
    is_geometry = rung.cost_m_s is None
    return {
        "name": "geometry alone" if is_geometry else f"+ {rung.adds}",
        "speed": number(rung.block_speed_m_s.mean, "m/s"),
        "cost": "" if rung.cost_m_s is None else number(rung.cost_m_s.mean, "m/s"),
        "interval": "" if rung.cost_m_s is None else interval(rung.cost_m_s, "m/s"),
        "arrived": "" if rung.arrival is None else arrived(rung.arrival),
    }


def arrived(arrival: Estimate) -> str:
    """How many of the runs arrived."""
    return f"{round(arrival.mean * arrival.n)} of {arrival.n}"


def finding_row(finding: Finding) -> dict[str, str]:
    """A verdict as text; a t interval of shares may leave 0 to 1, which they cannot."""
    measured = finding.measured
    if finding.unit.startswith("share"):
        measured = replace(measured, low=max(0.0, measured.low), high=min(1.0, measured.high))
    return {
        "name": finding.assumption,
        "statement": finding.statement,
        "planned": number(finding.predicted, finding.unit),
        "measured": number(finding.measured.mean, finding.unit),
        "interval": interval(measured, finding.unit),
        "verdict": str(finding.verdict),
    }


def mean_and_error(mean: StepMean, unit: str) -> str:
    """A mean with its standard error, both with the same prefix; alone where a single run gives no error.

    >>> mean_and_error(StepMean(2.6e-4, 1.2e-5, 8, 0), "m/s")
    '260 ± 12 µm/s'
    """
    if math.isnan(mean.standard_error):
        return number(mean.mean, unit)
    if unit.startswith("share"):
        return f"{number(mean.mean, unit)} ± {number(mean.standard_error, unit)}"
    factor, prefix = (1.0, "") if unit.startswith("1") else prefix_for(max(abs(mean.mean), mean.standard_error))
    return f"{mean.mean / factor:.3g} ± {two_digits(mean.standard_error / factor)} {prefix}{unit}"
