"""A run in words and rows of text, shared by the console and the page."""

from __future__ import annotations

import pandas as pd

from swarmpush.dynamics.run import Run
from swarmpush.dynamics.states import STATES
from swarmpush.quantities import for_people
from swarmpush.reporting.wording import AT_THE_BLOCK, CAUSES, REASONS, STATE_WORDS, TELLS_LITTLE, share_of

LEAST_REASON = 0.05  # a cause with a smaller share is no reason for a run's failure
PLAIN_REASON = 0.25  # what stands between thrust and motion for so long is the reason, whatever else there was


def run_answer(run: Run) -> str:
    """Whether the block arrived, how far it came, and what mainly kept it from arriving."""
    s = run.scenario
    goal, lasted = for_people(s.goal.travel, "m"), for_people(run.duration_s, "s")
    way = (
        f"the block covered {for_people(run.travel_m, 'm')} of {goal} in {lasted} ({for_people(run.speed_m_s, 'm/s')})"
    )
    if run.travel_m < 0.0:
        way = f"the block went back by {for_people(-run.travel_m, 'm')} in {lasted}, instead of ahead by {goal}"
    if run.has_arrived:
        return f"Arrived: {way}."
    return f"Did not arrive: {way}; {main_reason(run)}."


def main_reason(run: Run) -> str:
    """The main reason why a run did not arrive, in words.

    What keeps a push from moving the block comes first, if it lasted for a quarter of the time. Else it is the cause
    with the largest share; those that belong to any good lap (touching walls, turning) or only say what did not happen
    (no lap) are set aside unless nothing else has a share worth naming.
    """
    if run.ended != "time":
        return f"the run broke off because {run.ended}"
    table = run.failures[run.failures["share"] > LEAST_REASON].sort_values("share", ascending=False, kind="stable")
    plain = table[table["cause"].isin(AT_THE_BLOCK) & (table["share"] >= PLAIN_REASON)]
    telling = table[~table["cause"].isin(TELLS_LITTLE)]
    found = next((rows for rows in (plain, telling, table) if len(rows)), None)
    if found is None:
        return "nothing kept the crew from pushing, its pushes were too few or too weak"
    first = found.iloc[0]
    since = _since(float(first["t_first_s"]), run)
    return f"{REASONS[str(first['cause'])].format(share=share_of(float(first['share'])))}, {since}"


def _since(first: float, run: Run) -> str:
    return "from the start" if first <= 0.02 * run.duration_s else f"from {for_people(first, 's')} on"


def cause_rows(run: Run) -> list[dict[str, str]]:
    """The causes that occurred, largest share first: name, share, first, last, longest, spells."""
    table = run.failures[run.failures["share"] > 0.0].sort_values("share", ascending=False, kind="stable")
    return [
        {
            "name": CAUSES[str(row["cause"])],
            "share": share_of(float(row["share"])),
            "first": _time(float(row["t_first_s"])),
            "last": _time(float(row["t_last_s"])),
            "longest": _time(float(row["longest_s"])),
            "spells": str(row["spells"]),
        }
        for _, row in table.iterrows()
    ]


def _time(seconds: float) -> str:
    return "0 s" if seconds == 0.0 else for_people(seconds, "s")


def state_rows(run: Run) -> list[tuple[str, str]]:
    """Share of the crew's time in each state that occurred, in the order of the states."""
    shares = {name: float((run.states == name).mean()) for name in STATES}
    return [(STATE_WORDS[name], share_of(share)) for name, share in shares.items() if share > 0.0]


def state_shares(run: Run) -> pd.DataFrame:
    """Share of the crew in each state at each row of the path; one column per state."""
    states = run.states.reshape(-1, run.scenario.pushers.count)
    return pd.DataFrame({name: (states == name).mean(axis=1) for name in STATES}, index=run.block["t_s"])


def energy_parts(run: Run) -> list[tuple[str, float]]:
    """The energy account in J, name by name: what went in is positive, what was taken or kept is negative.

    The names that are 0 are left out, and so are parts too small to be more than rounding.
    """
    e = run.energy
    parts = [
        ("the drives' thrust", e.drive),
        ("drives that turn and hold headings", e.heading),
        ("gravity along the slope", e.slope),
        ("drag", -e.drag),
        ("floor under the blocks", -e.floor),
        *((f"contacts, {name.replace('_', ' with ')}", -lost) for name, lost in e.contacts.items()),
        ("motion left at the end", -e.change),
    ]
    most = max(abs(value) for _, value in parts)
    return [(name, value) for name, value in parts if abs(value) > 1e-6 * most]


def energy_rows(run: Run) -> list[tuple[str, str]]:
    """The energy account as text: how much, and how much of the drives' work that is."""
    work = run.energy.drive
    rows = []
    for name, value in energy_parts(run):
        share = f", {share_of(abs(value) / work)} of the thrust's work" if work > 0.0 and value != work else ""
        rows.append((name, f"{for_people(abs(value), 'J')} {'in' if value > 0.0 else 'out'}{share}"))
    return [*rows, ("what does not balance", f"{run.energy.residual_rel:.1e} of all work")]


def book_rows(run: Run) -> list[tuple[str, str]]:
    """What the books leave over, and how far bodies overlapped."""
    books = run.books
    return [
        ("residual", f"{books.residual_rel:.1e} of all impulses on the blocks"),
        ("residual about the centres", f"{books.residual_turn_rel:.1e} of the moments of all impulses"),
        ("displacement without velocity", f"{books.phantom_share:.1e} of the block's way"),
        ("deepest overlap", for_people(run.overlap_max_m, "m")),
    ]
