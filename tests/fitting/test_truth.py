"""Stated 95 % intervals against synthetic films with known truth, shared errors drawn as stated (independent model)."""

from __future__ import annotations

import pytest
from scipy.stats import binom

from tests.fitting.coverage import run
from tests.reference.truth import FAMILIES

CI_SITES = 120
NIGHTLY_SITES = 3000
NIGHTLY_MEANS = 1000


@pytest.mark.parametrize("family", sorted(FAMILIES))
def test_intervals_cover_the_truth(family):
    """Intervals of index and thickness hold the truth as often as a sample of independent sites allows."""
    study = run(family, CI_SITES, 1, seed=11)
    # One site a table: shared errors are drawn anew for each, so the sites are independent and the count is binomial.
    # Each bound is passed by a right program with probability 1e-5, some twenty bounds in all.
    low = binom.ppf(1e-5, CI_SITES, 0.95) / CI_SITES
    # A mean of n pulls has standard deviation 1 / sqrt(n); 0.1 is the bias allowed in the long run.
    pull = 0.1 + 4.3 / CI_SITES**0.5
    assert not study.failed, study.failed
    assert any(name.startswith("index") for name in study.tallies) and "thickness" in study.tallies
    for name, tally in study.tallies.items():
        assert tally.coverage >= low, (name, study.lines())
        assert abs(tally.mean_pull) < pull, (name, study.lines())


@pytest.mark.nightly
@pytest.mark.parametrize("family", sorted(FAMILIES))
def test_coverage_is_95_percent(family):
    """Over thousands of independent sites the 95 % intervals cover 95 +- 1.5 % and the bias is below a tenth of u."""
    study = run(family, NIGHTLY_SITES, 1, seed=101)
    print("\n".join([family, *study.lines()]))
    # One site a table: 3,000 independent draws, of which 1.5 % is nearly four standard deviations.
    assert len(study.failed) < 0.002 * study.sites, study.failed
    for name, tally in study.tallies.items():
        assert abs(tally.coverage - 0.95) < 0.015, (name, study.lines())
        assert abs(tally.mean_pull) < 0.1, (name, study.lines())


@pytest.mark.nightly
@pytest.mark.parametrize("family", sorted(FAMILIES))
def test_wafer_means_cover_the_truth(family):
    """Intervals of the means over four sites, which share their table's errors, cover 95 % as well."""
    study = run(family, 4 * NIGHTLY_MEANS, 4, seed=12)
    print("\n".join([family, *study.lines()]))
    # 1,000 independent means: 2.1 % is three standard deviations.
    means = {name: t for name, t in study.tallies.items() if name.startswith("wafer mean")}
    assert means
    for name, tally in means.items():
        assert abs(tally.coverage - 0.95) < 0.021, (name, study.lines())
        assert abs(tally.mean_pull) < 0.1, (name, study.lines())
