"""The report: made again from saved results, and complete in one file."""

from __future__ import annotations

import html
import json
import re
import shutil
from html.parser import HTMLParser
from pathlib import Path

import pytest
from commands import DONE, Saved, assert_refused, call, contents

from swarmpush.cautions import CAUTIONS


@pytest.fixture(params=["ran", "audited"])
def saved(request: pytest.FixtureRequest) -> Saved:
    """A run, and an audit."""
    found: Saved = request.getfixturevalue(request.param)
    return found


def test_made_again_from_saved_results(saved: Saved, tmp_path: Path) -> None:
    """The report of saved results is the first one, byte for byte, and the results stay as they are."""
    before, again = contents(saved.folder), tmp_path / "report.html"
    assert call("report", saved.folder, "--json", "--out", again).json() == {"report": str(again)}
    made = contents(tmp_path)
    assert made.pop("report.html") == before["report.html"]
    assert made == {name: data for name, data in before.items() if name.startswith("figures")}
    assert contents(saved.folder) == before


def test_a_report_is_replaced_only_by_force(ran: Saved, tmp_path: Path) -> None:
    """A report that is there is refused, unless --force is given."""
    folder = tmp_path / "run"
    shutil.copytree(ran.folder, folder)
    (folder / "report.html").write_text("mine")
    assert_refused(call("report", folder), str(folder / "report.html"), "--force")
    assert (folder / "report.html").read_text() == "mine"
    assert call("report", folder, "--force").code == DONE
    assert contents(folder) == contents(ran.folder)


@pytest.mark.parametrize("kind", ["nothing", "file", "empty", "no table", "cut table", "cut summary", "no sample"])
def test_a_folder_without_whole_results(kind: str, audited: Saved, tmp_path: Path) -> None:
    """A folder that does not hold all of an audit is refused by its name, and no report is written."""
    folder = tmp_path / "audit"
    if kind == "file":
        folder.write_text("mine")
    elif kind == "empty":
        folder.mkdir()
    elif kind != "nothing":
        shutil.copytree(audited.folder, folder)
        match kind:
            case "no table":
                (folder / "replicates.parquet").unlink()
            case "cut table":
                path = folder / "replicates.parquet"
                path.write_bytes(path.read_bytes()[:1000])
            case "cut summary":
                path = folder / "audit.json"
                path.write_bytes(path.read_bytes()[:1000])
            case "no sample":
                shutil.rmtree(folder / "sample")
    out = tmp_path / "report.html"
    assert_refused(call("report", folder, "--out", out), str(folder))
    assert not out.exists()


class Loads(HTMLParser):
    """Gathers what a page would load or run."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.found: list[str] = []
        self.n_pictures = 0
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.n_pictures += tag == "svg"
        if tag in ("script", "link", "iframe", "object", "embed", "base", "form", "foreignobject"):
            self.found.append(f"<{tag}>")
        for name, value in attrs:
            text = (value or "").strip()
            is_place = name.rpartition(":")[2] in ("src", "href", "srcset", "data", "action", "poster")
            is_beside = tag == "a" and text.startswith("figures/")  # fetched only when somebody follows it
            if (is_place and not text.startswith("#") and not is_beside) or name.startswith("on"):
                self.found.append(f"{name}={text}")
            self.handle_data(text if name == "style" or "url(" in text else "")

    def handle_data(self, data: str) -> None:
        self.found += [
            place for place in re.findall(r"url\(([^)]*)\)", data) if not place.strip("'\" ").startswith("#")
        ]
        self.found += re.findall(r"@import[^;]*", data)


@pytest.mark.parametrize(
    "piece",
    [
        "<script>1</script>",
        '<img src="https://example.org/a.png">',
        '<a href="http://example.org">',
        "<style>@import 'a.css';</style>",
        '<p style="background: url(https://example.org/a.png)">',
        '<svg><image xlink:href="a.png"/></svg>',
        '<p onclick="1">',
    ],
)
def test_the_search_for_outside_things_finds_them(piece: str) -> None:
    """What the next test must not find in a report, it does find where it is."""
    assert Loads(piece).found


def test_the_report_needs_nothing_else(saved: Saved) -> None:
    """A report has its pictures inside and loads and runs nothing."""
    page = Loads((saved.folder / "report.html").read_text(encoding="utf-8"))
    assert page.n_pictures >= 4
    assert page.found == []


def test_the_report_says_with_what_caution_to_read_it(saved: Saved) -> None:
    """Every caution stands in the report."""
    text = html.unescape((saved.folder / "report.html").read_text(encoding="utf-8"))
    for caution in CAUTIONS:
        assert caution in text


def test_the_report_says_what_the_audit_found(audited: Saved) -> None:
    """The report gives the audit's answer, its verdicts and its scenario's hash."""
    text = html.unescape((audited.folder / "report.html").read_text(encoding="utf-8"))
    audit = json.loads((audited.folder / "audit.json").read_text(encoding="utf-8"))
    assert audit["answer"] in text
    assert audit["provenance"]["scenario_hash"] in text
    for row in audit["verdicts"]:
        assert re.search(rf"<b>{row['assumption']}</b>.*>{row['verdict']}</span></td>", text)
