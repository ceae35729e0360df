"""What stands in the report and beside it, and what notebooks show."""

from __future__ import annotations

import html
import io
import math
import re
from collections.abc import Iterator
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import matplotlib.pyplot as plt
import numpy as np
import pandas as pd
import pytest

import swarmpush
from swarmpush import Audit, Run
from swarmpush.auditing.audit import RungResult, load_audit
from swarmpush.auditing.neighbours import CrewSize, Influence
from swarmpush.auditing.statistics import Estimate
from swarmpush.output import OutputError
from swarmpush.reporting import audit_rows, audit_words
from swarmpush.reporting.audit_drawing import ladder
from swarmpush.reporting.page import page

UNITS = r"_(m|s|m_s|rad|Ns|J|share|pushers|runs)$"
WORDS = {
    "rung",
    "adds",
    "n_runs",
    "line",
    "body",
    "when",
    "mode",
    "pusher",
    "part",
    "crew",
}  # columns of names and counts
DIGITS = 1e-8  # relative: data are written with nine digits


@pytest.fixture(autouse=True)
def _no_figures_left() -> Iterator[None]:
    yield
    plt.close("all")


def csv(path: Path, key: str) -> pd.DataFrame:
    return pd.read_csv(path.parent / "figures" / f"{key}.csv")


def test_every_figure_has_its_data(audit_page: Path) -> None:
    """As many tables as figures, of plain numbers, with units in the names of their columns."""
    text = audit_page.read_text(encoding="utf-8")
    named = set(re.findall(r'href="(figures/[a-z]+\.csv)"', text))
    assert len(named) == text.count("<figure>") == 10
    assert {f"figures/{file.name}" for file in (audit_page.parent / "figures").iterdir()} == named
    for name in named:
        table = pd.read_csv(audit_page.parent / name)
        for column in table:
            assert column in WORDS or re.search(UNITS, column), (name, column)
            assert column in WORDS or table[column].dtype.kind in "fi", (name, column)


def test_data_are_those_of_the_results(audit_page: Path, result: Audit) -> None:
    """The tables hold the audit's and its run's own numbers."""
    rungs = csv(audit_page, "ladder")
    costs = [math.nan if rung.cost_m_s is None else rung.cost_m_s.low for rung in result.ladder]
    np.testing.assert_allclose(rungs["cost_low_m_s"], costs, rtol=DIGITS)
    run = result.sample
    np.testing.assert_allclose(csv(audit_page, "impulses")["impact_Ns"].sum(), run.strikes["impact_Ns"].sum(), DIGITS)
    path = csv(audit_page, "path")
    assert path[path["line"] == "block 1"]["travel_m"].iloc[-1] == pytest.approx(run.travel_m, rel=DIGITS)
    assert (path["line"] == "end of a run").sum() == len(result.as_given)
    end = csv(audit_page, "end")
    block = end[end["body"] == "block 1"].set_index("when")["x_m"]
    assert block["end"] - block["start"] == pytest.approx(run.travel_m, rel=1e-6, abs=1e-9)
    assert len(end) == 2 * (1 + run.scenario.pushers.count)
    assert csv(audit_page, "energy")["energy_J"].sum() == pytest.approx(0.0, abs=1e-6 * run.energy.drive)
    arrivals = csv(audit_page, "arrivals")
    given = arrivals[arrivals["crew"] == "as given"]
    assert given["arrived_share"].iloc[-1] == pytest.approx(result.arrival.mean, rel=DIGITS)
    assert given["arriving_runs"].sum() == result.as_given["has_arrived"].sum()
    shares = csv(audit_page, "states").drop(columns="t_s").sum(axis=1)
    np.testing.assert_allclose(shares, 1.0, rtol=DIGITS)
    assert csv(audit_page, "leaning")["leaning_most_pushers"].max() == run.block["n_leaning_most"].max()
    assert csv(audit_page, "books").set_index("part")["impulse_Ns"]["pushers"] == pytest.approx(run.books.pushers[0])
    laps = csv(audit_page, "lap")
    assert (laps["line"] == "planned lap").sum() == len(result.plan.laps[0].hits)


def test_saved_results_give_the_same(audit_page: Path, result: Audit, tmp_path: Path) -> None:
    """A report from a saved folder is the same, with the same tables beside it."""
    result.save(tmp_path)
    again = swarmpush.report(load_audit(tmp_path), tmp_path / "report.html")
    assert again.read_bytes() == audit_page.read_bytes()
    for file in (audit_page.parent / "figures").iterdir():
        assert (tmp_path / "figures" / file.name).read_bytes() == file.read_bytes()


def test_a_file_in_the_way(run: Run, tmp_path: Path) -> None:
    """A file where the data should go is an error that names it, and no half report is left."""
    (tmp_path / "figures").write_text("mine")
    with pytest.raises(OutputError, match="figures"):
        swarmpush.report(run, tmp_path / "report.html")
    assert not (tmp_path / "report.html").exists()


def test_the_waterfall_goes_down_from_geometry(result: Audit) -> None:
    """Each bar begins where the rung ends that it is compared with; the last is the speed of the scenario as given."""
    axes = ladder(result).axes[0]
    spans = [(bar.get_x(), bar.get_x() + bar.get_width()) for bar in axes.patches]
    speeds = [rung.block_speed_m_s.mean for rung in result.ladder]
    assert len(spans) == len(speeds) + 1
    ends = np.array([span[1] for span in spans[:-1]])
    starts = np.array([span[0] for span in spans[1:-1]])
    names = [rung.rung for rung in result.ladder]
    against = [rung.against for rung in result.ladder[1:]]
    np.testing.assert_allclose(starts, [ends[names.index(name)] for name in against], rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(ends / ends[0], np.array(speeds) / speeds[0], rtol=1e-9, atol=1e-12)
    assert spans[-1] == pytest.approx((0.0, ends[-1]))
    assert len(axes.containers) >= len(speeds)  # whiskers, on all but the promise


def made(result: Audit, *costs: tuple[str, float, float, float]) -> Audit:
    """The audit with other rungs: what each adds, and its cost with both ends of the interval."""
    names = [result.ladder[0].rung, *(cost[0] for cost in costs)]
    speed, none = Estimate(1e-3, 1e-3, 1e-3, 3), Estimate(0, 0, 1, 3)
    rungs = [RungResult(adds, adds, speed, Estimate(c, low, high, 3), none, above)
             for above, (adds, c, low, high) in zip(names, costs, strict=False)]  # fmt: skip
    return replace(result, ladder=(result.ladder[0], *rungs))


def test_a_rung_beside_the_others(result: Audit) -> None:
    """A rung that names another one than the rung above begins at that one's speed, and the page says so."""
    first, second, third, *_ = result.ladder
    beside = replace(third, against=first.rung)
    audit = replace(result, ladder=(first, second, beside))
    bar = ladder(audit).axes[0].patches[2]
    promise = ladder(audit).axes[0].patches[0].get_width()
    assert bar.get_x() == pytest.approx(promise)
    assert audit_words.compared_words(audit).endswith(f"; for {third.adds} it is the one to geometry.")
    assert audit_words.compared_words(replace(result, ladder=(first, second))).endswith("rung above it.")


def shown_span(audit: Audit) -> tuple[float, float, float]:
    """Ends of the ladder's axis, and the length of all bars together, all in the picture's unit."""
    axes = ladder(audit).axes[0]
    ends = [end for bar in axes.patches for end in (bar.get_x(), bar.get_x() + bar.get_width())]
    return (*axes.get_xlim(), max(ends) - min(ends))


def test_the_waterfall_stays_legible(result: Audit) -> None:
    """Endless whiskers and a goal far beyond all speeds do not squeeze the bars; what is needed is then said."""
    wild = made(result, ("wild", -1e-4, -1.0, 1.0), ("single", -1e-4, -math.inf, math.inf))
    low, high, bars = shown_span(wild)
    assert (high - low) < 5.0 * bars
    assert low < 0.0
    far = replace(wild, scenario=result.scenario.replace(goal={"travel": 10.0}))
    low, high, bars = shown_span(far)
    assert (high - low) < 5.0 * bars
    assert any("beyond this edge" in text.get_text() for text in ladder(far).axes[0].texts)
    near = replace(wild, scenario=result.scenario.replace(goal={"travel": 0.0015}))
    assert any(text.get_text() == "needed" for text in ladder(near).axes[0].texts)


def test_the_largest_costs_in_words(result: Audit) -> None:
    """Three costs, the largest first, gains left out, and chance named where the interval holds nought."""
    audit = made(
        result,
        ("small", -1e-5, -2e-5, -5e-6),
        ("large", -3e-4, -4e-4, -2e-4),
        ("gain", 5e-4, 4e-4, 6e-4),
        ("doubtful", -2e-4, -5e-4, 1e-4),
        ("least", -1e-6, -2e-6, -5e-7),
    )
    told = audit_words.cost_sentences(audit)
    assert [sentence.split(":")[0] for sentence in told] == ["Large", "Doubtful", "Small"]
    assert "300 µm/s slower (200 to 400 µm/s)" in told[0]
    assert told[0].endswith(f"{3e-4 / audit.plan.travel.block_speed_m_s:.0%} of the planned speed.")
    assert ["chance" in sentence for sentence in told] == [False, True, False]
    assert audit_words.cost_sentences(made(result, ("gain", 5e-4, 4e-4, 6e-4))) == []
    assert "No rung of the ladder slows the block." in page(made(result, ("gain", 5e-4, 4e-4, 6e-4)))


def test_parts_that_an_audit_may_have(result: Audit) -> None:
    """Demands, other crews and measured values are shown where there are any; all is escaped."""
    headings = ("What was demanded", "Round about")
    assert not any(heading in page(result) for heading in headings)
    granted = replace(result.restored[0], statement="nobody <i>errs</i>", gain_m_s=Estimate(5e-4, 4e-4, 6e-4, 3))
    estimate = result.ladder[-1].block_speed_m_s
    crews = tuple(CrewSize(n, estimate, None, result.arrival, 0.1, 0.01, 0.2) for n in (3, 6))
    influence = Influence("block.mass", 0.5, 0.25, Estimate(-1e-3, -2e-3, -5e-4, 3), 0.1, 0.05)
    full = replace(
        result,
        restored=(result.restored[1], granted),
        crews=crews,
        influences=(influence,),
        required=("arrival >= 0.8", "block_speed<=1 m/s"),
    )
    text = page(full)
    for heading in headings:
        assert heading in text
    assert audit_rows.restored_rows(full)[0]["cost"] == "+500 µm/s"
    assert [words.split(":")[0] for _, words in audit_rows.demand_rows(full)] == ["not met", "met"]
    assert "nobody &lt;i&gt;errs&lt;/i&gt;" in text
    assert "Measure first: block.mass to within 10%." in text
    assert "-100 µm/s" in text  # a tenth of the change per relative change
    assert "<i>" not in text


def test_regimes_come_first_among_the_details(audit_page: Path, result: Audit) -> None:
    """The order of the sections, and in them each number without dimension and each cause."""
    text = html.unescape(audit_page.read_text(encoding="utf-8"))
    order = ("ladder", "verdicts", "arrival", "why", "lap", "strikes", "numerics", "provenance", "cautions")
    places = [text.index(f'<h2 id="{key}">') for key in ("regimes", *order)]
    assert places == sorted(places)
    for regime in result.plan.regime:
        assert regime.meaning in text
    for row in (*audit_rows.audited_cause_rows(result), *audit_rows.arrival_rows(result)):
        assert row["name"] in text
    for seed in result.as_given["seed"]:
        assert str(seed) in text


def test_the_command_gives_the_scenario_by_name_only_if_it_is_that_one(result: Audit) -> None:
    """A demo is named, with any seed; a changed one is not."""
    demo = swarmpush.load(swarmpush.demo("gel_channel"))
    assert audit_words.scenario_word(demo) == "gel_channel"
    assert audit_words.scenario_word(demo.replace(trial={"seed": 99})) == "gel_channel"
    assert audit_words.scenario_word(demo.replace(goal={"time_limit": 1.0})) == "SCENARIO.toml"
    assert (
        audit_words.command_of(result)
        == f"swarmpush audit SCENARIO.toml --replicates 3 --seed {result.scenario.trial.seed}"
    )
    assert audit_words.command_of(result.sample) == f"swarmpush run SCENARIO.toml --seed {result.sample.seed}"


class Tags(HTMLParser):
    """Gathers tags, attributes and text."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.seen: set[str] = set()
        self.attributes: set[str] = set()
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.seen.add(tag)
        self.attributes.update(name for name, _ in attrs)
        if tag != "br":
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += data


@pytest.mark.parametrize("kind", ["plan", "run", "audit"])
def test_in_a_notebook(kind: str, result: Audit) -> None:
    """A notebook shows the answer and a table as small, whole and escaped HTML that loads and runs nothing."""
    record = {"plan": result.plan, "run": result.sample, "audit": result}[kind]
    shown = record._repr_html_()
    tags = Tags(shown)
    assert tags.open == []
    assert tags.seen <= {"div", "p", "strong", "br", "table", "caption", "thead", "tbody", "tr", "th", "td"}
    assert tags.attributes <= {"scope", "style"}
    assert "url(" not in shown
    assert len(shown) < 10_000
    assert result.scenario.about.name in tags.text
    words = {
        "plan": [regime.meaning for regime in result.plan.regime],
        "run": [f"seed {result.sample.seed}"],
        "audit": [result.answer, *(rung.adds for rung in result.ladder[1:])],
    }
    for word in words[kind]:
        assert word in tags.text


def test_csv_text_is_plain() -> None:
    """Undefined numbers are empty, and a comma in a name is quoted."""
    from swarmpush.reporting.figure_data import as_csv

    table = pd.DataFrame({"line": ["a, b", "c"], "x_m": [math.nan, 1e-7]})
    assert as_csv(table) == 'line,x_m\n"a, b",\nc,1e-07\n'
    assert pd.read_csv(io.StringIO(as_csv(table)))["x_m"][1] == 1e-7


def test_two_reports_in_one_folder(run: Run, result: Audit, tmp_path: Path) -> None:
    """Each page has a folder of its own for its data, to which its links lead."""
    for what, name in ((run, "first run"), (result, "report")):
        text = swarmpush.report(what, tmp_path / f"{name}.html").read_text(encoding="utf-8")
        for link in re.findall(r'href="([^"#]+\.csv)"', text):
            assert (tmp_path / link.replace("%20", " ")).is_file(), link
    assert {folder.name for folder in tmp_path.iterdir() if folder.is_dir()} == {"first run-figures", "figures"}
