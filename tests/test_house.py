"""The house itself: what is packaged, what the README promises, which files grow too large."""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
ROOMS = ("solver", "fitting", "datasets", "templates")


def test_every_subpackage_is_listed():
    """The package list names every folder with an __init__ in the rooms, so that the wheel misses none."""
    folders = {
        "layerlot." + ".".join(p.parent.relative_to(ROOT).parts)
        for room in ROOMS
        for p in (ROOT / room).rglob("__init__.py")
    }
    assert folders == set(PROJECT["tool"]["setuptools"]["packages"])


def test_data_files_reach_the_package():
    """Every data file of datasets and templates is covered by the package-data patterns."""
    data = PROJECT["tool"]["setuptools"]["package-data"]
    for room in ("datasets", "templates"):
        patterns = data[f"layerlot.{room}"]
        for path in (ROOT / room).rglob("*"):
            if path.is_file() and path.suffix not in (".py", ".pyc"):
                assert any(path.relative_to(ROOT / room).match(p.removeprefix("**/")) for p in patterns), path


def test_readme_states_the_job_and_two_commands():
    """The first paragraph is the job; the two set-up commands stand near the top, one line each."""
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    first = text.split("\n\n")[1]
    assert "uncertainty" in first and "prism-coupler" in first
    for name in ("demo", "test"):
        block = text.split(f"<!-- {name} command -->\n```sh\n")[1].split("\n```")[0]
        assert block.startswith("python3 -m venv .venv && .venv/bin/pip install") and "\n" not in block
        assert text.index(block) < 2500


def test_changelog_tells_this_version():
    """The newest changelog heading is the version that is packaged."""
    heading = re.search(r"^## (\S+)", (ROOT / "CHANGELOG.md").read_text(encoding="utf-8"), re.MULTILINE)
    assert heading and heading[1] == PROJECT["project"]["version"]


def test_no_file_of_the_rooms_is_over_500_lines():
    """Small rooms: no module of the program is longer than 500 lines."""
    long = [
        p
        for room in ROOMS
        for p in (ROOT / room).rglob("*.py")
        if len(p.read_text(encoding="utf-8").splitlines()) > 500
    ]
    assert not long


@pytest.mark.parametrize("heavy", ["numpy", "scipy", "lmfit", "openpyxl", "matplotlib", "pydantic"])
def test_help_loads_nothing_heavy(heavy):
    """`layerlot --help` answers without loading numerics, plots or workbooks."""
    code = (
        "import sys; from layerlot.fitting.cli import main\n"
        "try: main(['--help'])\n"
        "except SystemExit: pass\n"
        f"sys.exit({heavy!r} in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], capture_output=True, check=False).returncode == 0
