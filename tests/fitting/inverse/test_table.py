"""A table as a whole: shared quantities, means, budget, interruption, several processes."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import InputRefused, Status
from scipy.optimize import least_squares

from tests.reference.field_model import coupling_angle_deg, guided_modes

from .sheets import PRISM, SUBSTRATE, codes, film, only, orders, readings, stack, unlabelled, value

FILMS = [(1.975, 0.55), (1.98, 0.56), (1.985, 0.57)]


def table(label: bool = True):
    rng = np.random.default_rng(11)
    out = []
    for k, (n, t) in enumerate(FILMS):
        rows = film(n, t, noise=rng)
        out += readings(rows if label else unlabelled(rows), site=str(k))
    return out


def dense_fit(sheet):
    """All sites and shared quantities in one plain least squares on the independent model, difference Jacobian."""
    sites = sorted({r.site for r in sheet})

    def residual(x):
        n_sub, n_p, zero = SUBSTRATE + 5e-4 * x[0], PRISM + 2e-4 * x[1], 0.01 * x[2]
        out = list(x[:3])
        for k, site in enumerate(sites):
            n, t = x[3 + 2 * k], x[4 + 2 * k]
            for pol in ("TE", "TM"):
                mine = [r for r in sheet if r.site == site and r.pol == pol]
                N = guided_modes(np.array([[n_sub, n, 1.0]]), np.array([[t]]), 0.6328, pol == "TM")[0]
                angle = coupling_angle_deg(N, n_p, 60.0) + zero
                out += [(r.value - angle[r.order]) / 0.01 for r in mine]
        return np.array(out)

    start = np.concatenate([np.zeros(3), np.ravel(FILMS)])
    scale = np.concatenate([np.ones(3), np.tile([1e-3, 1e-3], len(sites))])
    fit = least_squares(residual, start, jac="3-point", x_scale=scale, xtol=1e-14, ftol=1e-14, gtol=1e-14)
    return fit.x, np.sqrt(np.diag(np.linalg.inv(fit.jac.T @ fit.jac)))


def test_shared_quantities_as_in_one_fit_of_everything():
    """Site by site with the rest of the table as prior gives what one dense fit of all unknowns gives."""
    sheet = table()
    result = fit_table(stack(), sheet)
    x, u = dense_fit(sheet)
    # Both minimise the same sum; what is left is the curvature over one u, some hundredths of u.
    for k, site in enumerate(result.sites):
        for i, (quantity, scale) in enumerate((("index", 1.0), ("thickness", 1000.0))):
            e = next(e for e in site.estimates if e.layer == "core" and e.quantity == quantity)
            place = 3 + 2 * k + i
            assert abs(e.value - x[place] * scale) < 0.02 * e.u
            assert abs(e.u / (u[place] * scale) - 1) < 0.01
    for e, place, unit, mean in zip(result.shared, (0, 1, 2), (5e-4, 2e-4, 0.01), (SUBSTRATE, PRISM, 0.0), strict=True):
        assert abs(e.value - mean - x[place] * unit) < 0.02 * e.u
        assert abs(e.u / (u[place] * unit) - 1) < 0.01


def test_shared_part_is_not_averaged_away():
    """Twenty like sites shrink the random part of a wafer mean by root twenty and leave the shared part as it is."""
    rng = np.random.default_rng(12)
    sheet = [r for k in range(20) for r in readings(film(1.98, 0.56, noise=rng), site=str(k))]
    result = fit_table(stack(), sheet)
    for quantity in ("index", "thickness"):
        mean = next(m for m in result.means if m.level == "wafer" and m.quantity == quantity)
        mine = [e for s in result.sites for e in s.estimates if e.layer == "core" and e.quantity == quantity]
        assert mean.sites == 20 and np.isclose(mean.value, np.mean([e.value for e in mine]))
        assert np.isclose(mean.u_random, np.mean([e.u_random for e in mine]) / 20**0.5, rtol=1e-3)
        assert np.isclose(mean.u_shared, np.mean([e.u_shared for e in mine]), rtol=1e-3)
        assert mean.spread is not None and 0.5 < mean.spread / np.mean([e.u_random for e in mine]) < 1.6  # chi(19)


def test_known_thickness_counts_as_common_in_means():
    """The oxide thickness of a stack, known with u, moves all sites alike: its share stays whole in the mean."""
    oxide = '[[layer]]\nname = "oxide"\nindex = 1.46\nthickness_nm = { value = 300, u = 40 }'
    rng = np.random.default_rng(13)
    sheet = [r for k in range(9) for r in readings(film(1.98, 0.56, noise=rng), site=str(k))]
    result = fit_table(stack(more=oxide), sheet)
    mean = next(m for m in result.means if m.level == "wafer" and m.quantity == "index" and m.layer == "core")
    share = [b.u for s in result.sites for b in s.budget if b.source == "thickness of oxide" and b.quantity == "index"]
    assert min(share) > 5e-6 and mean.u_shared > 0.99 * np.mean(share)


def test_budget_adds_up():
    """The squares of the shares of a number add up to its u squared, random and shared apart."""
    for site in fit_table(stack(), table()).sites:
        for e in site.estimates:
            lines = [b for b in site.budget if (b.layer, b.quantity, b.axis) == (e.layer, e.quantity, e.axis)]
            random = sum(b.u**2 for b in lines if b.kind == "random")
            assert np.isclose(random, e.u_random**2, rtol=1e-6)
            assert np.isclose(sum(b.u**2 for b in lines), e.u**2, rtol=1e-3)


def test_correlation_is_that_of_the_dense_covariance():
    """Index and thickness of one site are anticorrelated as the plain covariance says."""
    sheet = readings(film(1.98, 0.56))
    site = only(fit_table(stack(), sheet))
    names = [e.quantity for e in site.estimates if e.layer == "core"]
    assert names == ["index", "thickness"]
    assert site.correlation.shape == (len(site.estimates),) * 2
    assert np.allclose(np.diag(site.correlation), 1) and -1 < site.correlation[0, 1] < 0


def test_two_processes_give_the_same_numbers():
    """Results do not depend on the number of worker processes."""
    rng = np.random.default_rng(14)
    sheet = [r for k in range(70) for r in readings(film(1.98, 0.56, noise=rng), site=str(k))]
    one, two = fit_table(stack(), sheet), fit_table(stack(), sheet, workers=2)
    for a, b in zip(one.sites, two.sites, strict=True):
        assert [e.value for e in a.estimates] == pytest.approx([e.value for e in b.estimates], rel=1e-12)


def test_a_stop_keeps_what_is_done():
    """Asked to stop, the fit ends cleanly: finished sites have numbers, the others a flag and none."""
    rng = np.random.default_rng(15)
    sheet = [r for k in range(100) for r in readings(film(1.98, 0.56, noise=rng), site=str(k))]
    seen: list[tuple[int, int]] = []
    result = fit_table(
        stack(), sheet, progress=lambda done, total: seen.append((done, total)), should_stop=lambda: len(seen) >= 2
    )
    done = [s for s in result.sites if s.status is Status.OK]
    rest = [s for s in result.sites if "interrupted" in codes(s)]
    assert result.interrupted and done and rest and len(done) + len(rest) == 100
    assert all(s.estimates == () and s.status is Status.FAILED for s in rest)
    assert seen[0][1] == 200


def test_unlabelled_sheet_gives_the_labelled_answer():
    """Without mode numbers the orders are found and the numbers are the same."""
    with_labels, without = fit_table(stack(), table()), fit_table(stack(), table(label=False))
    for a, b in zip(with_labels.sites, without.sites, strict=True):
        assert b.status is Status.OK and orders(a) == orders(b)
        assert value(a, "index") == pytest.approx(value(b, "index"), rel=1e-9)


def test_cauchy_curve_over_three_wavelengths():
    """One curve over three wavelengths returns the indices that it went through, with less u than free ones."""
    waves = (532.0, 632.8, 1310.0)
    curve = [1.95 + 0.012 / (w / 1000) ** 2 for w in waves]
    rng = np.random.default_rng(16)
    rows = [r for w, n in zip(waves, curve, strict=True) for r in film(n, 0.9, wavelength_nm=w, noise=rng)]
    free = only(fit_table(stack(), readings(rows)))
    site = only(fit_table(stack(index="{ fit_cauchy = 2, near = 1.97 }"), readings(rows)))
    for w, n in zip(waves, curve, strict=True):
        e = next(e for e in site.estimates if e.wavelength_nm == w)
        f = next(e for e in free.estimates if e.wavelength_nm == w)
        assert abs(e.value - n) < 4 * e.u  # four u: one chance in 16,000 a wavelength, and the seed is fixed
        assert e.u_random < f.u_random


def test_far_prism_constant_is_called_out():
    """A table that can only be fitted with the prism far from its stated index says so."""
    rng = np.random.default_rng(17)
    sheet = [
        r
        for k, (n, t) in enumerate([(1.97, 0.9), (1.98, 1.0), (1.99, 1.1)])
        for r in readings(film(n, t, prism=PRISM + 0.004, noise=rng), site=str(k))
    ]
    result = fit_table(stack(prism="{ value = 2.1745, u = 0.0005 }"), sheet)
    flagged = {f.code for f in result.shared_flags} | {c for s in result.sites for c in codes(s)}
    assert flagged & {"shared_out_of_prior", "poor_fit"}


def test_effective_index_without_uncertainty_is_refused():
    """Effective indices need their own u: every such row is a fault with its remedy."""
    from dataclasses import replace

    from layerlot.fitting.records import Quantity

    rows = [replace(r, quantity=Quantity.EFFECTIVE_INDEX, value=1.9) for r in readings(film(1.98, 0.56))[:2]]
    with pytest.raises(InputRefused) as refused:
        fit_table(stack(), rows)
    assert len(refused.value.faults) == 2
    assert "add a column u" in str(refused.value.faults[0])


def test_effective_indices_are_fitted_as_they_stand():
    """A sheet of effective indices with u gives the film, prism or not."""
    from dataclasses import replace

    from layerlot.fitting.records import Quantity

    modes = {
        pol: guided_modes(np.array([[SUBSTRATE, 1.98, 1.0]]), np.array([[0.56]]), 0.6328, pol == "TM")[0]
        for pol in ("TE", "TM")
    }
    rows = [
        replace(r, quantity=Quantity.EFFECTIVE_INDEX, value=float(modes[r.pol][r.order]), u=1e-4)
        for r in readings(film(1.98, 0.56))
    ]
    site = only(fit_table(stack(substrate=str(SUBSTRATE)), rows))
    assert value(site, "index") == pytest.approx(1.98, abs=1e-7)
    assert value(site, "thickness") == pytest.approx(560, abs=1e-4)
