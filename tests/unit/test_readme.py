"""The README says what is so."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

PROJECT = Path(__file__).resolve().parents[2]
README = (PROJECT / "README.md").read_text(encoding="utf-8")


def test_python_examples_run() -> None:
    """Every Python block of the README runs as it stands."""
    blocks = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    assert blocks
    for block in blocks:
        exec(compile(block, "README.md", "exec"), {})


def test_reference_of_keys_is_up_to_date() -> None:
    """The README's tables of scenario keys are those of the model."""
    done = subprocess.run([sys.executable, str(PROJECT / "tools" / "readme.py"), "--check"], capture_output=True)
    assert done.returncode == 0, "run python tools/readme.py"


def test_files_it_names_exist() -> None:
    """Pictures and files that the README names are there."""
    for name in re.findall(r"\]\(([^)]+)\)|`((?:scenarios|tools)/[\w./]+)`", README):
        assert (PROJECT / (name[0] or name[1])).exists()


@pytest.mark.slow
def test_built_wheel_works_away_from_the_sources(tmp_path: Path) -> None:
    """The wheel carries all that the package needs: demos, page template, type marker."""
    pip = [sys.executable, "-m", "pip", "--disable-pip-version-check", "--quiet"]
    subprocess.run([*pip, "wheel", "--no-deps", "--wheel-dir", str(tmp_path), str(PROJECT)], check=True)
    (wheel,) = tmp_path.glob("*.whl")
    site = tmp_path / "site"
    subprocess.run([*pip, "install", "--no-deps", "--target", str(site), str(wheel)], check=True)
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); import swarmpush, pathlib\n"
        "from swarmpush.reporting.page import page\n"
        "home = pathlib.Path(swarmpush.__file__).parent\n"
        "assert home.parent == pathlib.Path(sys.argv[1]) and (home / 'py.typed').exists()\n"
        "s = swarmpush.load(swarmpush.demo('gel_channel')).replace(goal={'time_limit': 2.0})\n"
        "print(len(page(swarmpush.simulate(s))))"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(site)], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert int(done.stdout) > 10_000  # a page with its pictures
