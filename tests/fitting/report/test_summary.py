"""What the terminal shows."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from layerlot.fitting.report import summary_text

from tests.fitting.report import fixtures

GOLDEN = Path(__file__).parent / "golden"
# value ± U, the value perhaps in whole nanometres
ANSWER = re.compile(r"\d+(\.\d+)? ± \d+(\.\d+)?")


@pytest.mark.parametrize("name", ["good", "bad", "uniaxial"])
def test_golden_text(name):
    """The text of a good, a bad and a uniaxial fit changes on purpose only."""
    assert summary_text(getattr(fixtures, name)()) == (GOLDEN / f"{name}.txt").read_text(encoding="utf-8")


def test_few_sites_are_all_shown():
    """Up to a dozen sites stand one by one, with U after each value."""
    text = summary_text(fixtures.good())
    rows = [line for line in text.splitlines() if line.endswith("  ok")]
    assert len(rows) == 10
    assert all(len(ANSWER.findall(row)) == 2 for row in rows)


def test_many_sites_are_summed_up():
    """1,225 sites show as counts, means and the sites in trouble, on two screens."""
    text = summary_text(fixtures.big())
    assert "1,225 sites: 1,177 good, 43 FLAGGED, 5 FAILED." in text
    assert len(text.splitlines()) < 100
    assert all(f"HF-0413  W{k:02d} " in text for k in range(1, 26))
    assert "... and 28 more: see report.html or results.xlsx" in text


@pytest.mark.parametrize("name", [*fixtures.ALL, "big"])
def test_lines_fit_the_terminal(name):
    """No line is longer than the stated width."""
    assert max(map(len, summary_text(getattr(fixtures, name)()).splitlines())) <= 112


def test_failed_sites_show_no_number():
    """A failed site's row says so in place of a number, and its flag says what to do."""
    text = summary_text(fixtures.bad())
    row = next(line for line in text.splitlines() if line.endswith("FAILED"))
    assert "±" not in row and row.count("no answer") == 2
    assert "Check prism index, base angle" in " ".join(text.split())


def test_what_is_not_symmetric_is_spelt_out():
    """An answer with an asymmetric interval shows the interval beside ± U."""
    assert re.search(
        r"^\* lot HF-0412, wafer W1, site 4: 95 % interval .* 401\.4 to 409\.5 nm$", summary_text(fixtures.bad()), re.M
    )


def test_early_stop_is_loud():
    """An interrupted run says so in the second line."""
    assert "THE RUN WAS STOPPED EARLY" in summary_text(fixtures.interrupted()).splitlines()[1]


def test_answers_come_first():
    """The first value ± U stands before any flag, within the first eight lines."""
    lines = summary_text(fixtures.bad()).splitlines()
    assert any(ANSWER.search(line) for line in lines[:8])
    assert lines.index("FLAGS AND WHAT TO DO") > 8
