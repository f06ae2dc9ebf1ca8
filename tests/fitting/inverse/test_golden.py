"""The text a user sees for one good and one bad table, word for word. A change here is made on purpose and told in
the changelog."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.report import summary_text

from .sheets import film, readings, stack, unlabelled

GOLDEN = Path(__file__).parent / "golden"


def good():
    """Three sites with labelled modes."""
    rng = np.random.default_rng(31)
    films = ((1.975, 0.55), (1.98, 0.56), (1.985, 0.57))
    return [r for k, (n, t) in enumerate(films) for r in readings(film(n, t, noise=rng), site=str(k + 1))]


def bad():
    """One fault a site: one mode only; numbered from 1; polarisations exchanged; a typing error; thicker than the
    window."""
    rng = np.random.default_rng(32)
    rows = film(1.98, 0.9, noise=rng)
    typed = [(*r[:2], r[2] + (1.0 if k == 2 else 0.0), r[3]) for k, r in enumerate(rows)]
    sheets = {
        "one mode": rows[:1],
        "numbered from 1": [(pol, m + 1, a, w) for pol, m, a, w in rows],
        "exchanged": [("TE" if pol == "TM" else "TM", m, a, w) for pol, m, a, w in rows],
        "typing error": unlabelled(typed),
        "too thick": film(1.98, 1.3, noise=rng),
    }
    return [r for site, sheet in sheets.items() for r in readings(sheet, site=site)]


@pytest.mark.parametrize("name", ["good", "bad"])
def test_summary_of_a_real_fit(name):
    """The summary of a fitted table is the golden text."""
    found = summary_text(fit_table(stack(), {"good": good, "bad": bad}[name]()))
    assert found == (GOLDEN / f"{name}.txt").read_text(encoding="utf-8")
