"""What the readings cannot tell is a flag with its remedy, never a number."""

from __future__ import annotations

import numpy as np
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import Status

from .sheets import PRISM, asked_for, codes, film, only, orders, readings, stack, unlabelled, value

RNG = np.random.default_rng(41)
TWO_MODES = film(1.98, 0.5)  # TE0, TE1, TM0, TM1


def fit(rows, **stack_words):
    return only(fit_table(stack(**stack_words), readings(rows)))


def flag_text(site, code):
    return next(f.text for f in site.flags if f.code == code)


def test_one_mode_is_a_flag_that_names_the_trade_off():
    """One mode for index and thickness gives no number, names both and asks for a second mode."""
    for rows in (TWO_MODES[:1], unlabelled(TWO_MODES[:1])):
        site = fit(rows)
        assert site.status is Status.FAILED and asked_for(site) == []
        text = flag_text(site, "loose_direction")
        assert "thickness of core and index of core at 632.8 nm trade off" in text and "Read a second mode (TM" in text


def test_a_known_thickness_makes_one_mode_enough():
    """The remedy that the flag names works: with the thickness known, one mode gives the index."""
    site = fit(TWO_MODES[:1], thickness="{ value = 500, u = 2 }")
    assert site.status is Status.OK
    assert abs(value(site, "index") - 1.98) < 0.002  # 4e-4 of index a nm of thickness, and the prism's share


def test_one_unknown_too_many():
    """Two TE modes of a uniaxial film leave the index along the normal open and ask for TM; the others stand."""
    n = "{ fit = [1.9, 2.05] }"
    site = fit(TWO_MODES[:2], index=n, normal=n)
    assert "loose_direction" in codes(site)
    assert "Read TM modes" in flag_text(site, "loose_direction")
    assert not any(e.axis == "normal" and e.layer == "core" for e in site.estimates)
    assert abs(value(site, "thickness") - 500) < 2


def test_two_readings_for_three_coupled_unknowns():
    """One TE and one TM reading of a uniaxial film give no number at all."""
    n = "{ fit = [1.9, 2.05] }"
    site = fit([TWO_MODES[0], TWO_MODES[2]], index=n, normal=n)
    assert site.status is Status.FAILED and asked_for(site) == []


def test_cauchy_curve_from_one_wavelength_keeps_the_index_there():
    """A two-term curve from one wavelength loses its slope, not the index at that wavelength."""
    site = fit(TWO_MODES, index="{ fit_cauchy = 2, near = 1.97 }")
    assert "one more wavelength" in flag_text(site, "loose_direction")
    assert asked_for(site) == ["index", "thickness"]
    assert abs(value(site, "index") - 1.98) < 0.002


def test_angles_that_no_film_can_give():
    """Readings outside every film of the windows are refused with the effective indices that they mean."""
    for sign in (1.0, -1.0):
        site = fit([("TE", None, sign * a, 632.8) for a in (70.0, 80.0)] + [("TM", None, sign * 75.0, 632.8)])
        assert site.status is Status.FAILED and site.estimates == ()
        assert "mean effective indices from" in flag_text(site, "no_mode_possible")


def test_prism_below_the_film():
    """A prism of lower index than the film is a flag that asks for another prism, labelled or not."""
    rows = film(1.98, 0.5, prism=1.75)
    for sheet in (rows, unlabelled(rows)):
        site = fit(sheet, prism="{ value = 1.75, u = 0.0002 }")
        assert site.status is Status.FAILED and asked_for(site) == []
        assert "Use a prism of higher index" in flag_text(site, "prism_below_film")


def test_answer_at_the_window_is_no_answer():
    """A film outside its thickness window gives no number, whichever flag it meets first."""
    site = fit(film(1.98, 0.6), thickness="{ fit = [300, 560] }")
    assert site.status is Status.FAILED and asked_for(site) == []


def test_modes_numbered_from_one():
    """A sheet that numbers from 1 is fitted with the right orders and flagged, each change named."""
    rows = [(pol, m + 1, a, w) for pol, m, a, w in film(1.98, 0.75)]
    site = fit(rows)
    assert codes(site) == {"label_doubtful"}
    assert orders(site) == [m - 1 for _, m, _, _ in rows]
    assert "reads as TE0" in flag_text(site, "label_doubtful")


def test_polarisations_exchanged():
    """A sheet with TE and TM exchanged gives no number and says what would make it fit."""
    rows = [("TE" if pol == "TM" else "TM", m, a, w) for pol, m, a, w in film(1.98, 0.75, noise=RNG)]
    site = fit(rows)
    assert "polarisation_doubtful" in codes(site) and asked_for(site) == []


def test_noise_beyond_what_is_stated_widens_u():
    """Readings that scatter three times wider than stated are flagged and their random u grows by the Birge ratio."""
    good = fit(film(1.98, 1.1, noise=np.random.default_rng(1)))
    # Alternating errors of three u: no film follows them, and none is far enough off to be set aside.
    wild = [(pol, m, a + 0.03 * (-1) ** k, w) for k, (pol, m, a, w) in enumerate(film(1.98, 1.1))]
    site = fit(wild)
    assert "poor_fit" in codes(site)
    assert site.fit is not None and site.fit.p_value < 1e-3 and site.fit.readings_rejected == 0
    ratio = (site.fit.chi2 / site.fit.dof) ** 0.5
    grown = {(e.layer, e.quantity): e.u_random for e in site.estimates}
    for e in good.estimates:
        assert np.isclose(grown[e.layer, e.quantity], e.u_random * ratio, rtol=0.02)  # the Jacobians differ a little


def test_whole_degree_typing_error_is_named():
    """A reading typed one degree off is set aside, stays visible and its whole-degree distance is named."""
    rows = film(1.98, 1.1, noise=np.random.default_rng(3))
    rows[2] = (*rows[2][:2], rows[2][2] + 1.0, rows[2][3])
    site = fit(unlabelled(rows))
    assert site.status is Status.OK and not site.readings[2].used
    assert "+1 degrees off: a typing error?" in (site.readings[2].reason or "")
    assert orders(site)[:2] == [0, 1] and orders(site)[3] == 3


def test_ambiguous_orders_give_rivals():
    """Two TE readings of a film that may be thin or thick are flagged; rivals come with probability and numbers."""
    rows = unlabelled(film(1.98, 0.9)[1:3])  # TE1 and TE2 only
    site = fit(rows, thickness="{ fit = [200, 2000] }")
    assert "order_ambiguous" in codes(site) and site.rivals
    total = sum(r.probability for r in site.rivals)
    assert 0.002 < total < 1
    for rival in site.rivals:
        assert rival.delta_chi2 >= 0 and all(e.u > 0 for e in rival.estimates)


def test_every_number_carries_its_uncertainty():
    """No estimate, rival or shared quantity is without u, and u squared is random squared plus shared squared."""
    result = fit_table(stack(), readings(film(1.98, 0.9, noise=np.random.default_rng(5))))
    site = only(result)
    for e in (*site.estimates, *result.shared):
        assert e.u > 0 and e.low95 < e.value < e.high95
        assert np.isclose(e.u**2, e.u_random**2 + e.u_shared**2, rtol=1e-9)
    assert PRISM - 0.001 < next(e.value for e in result.shared if e.quantity == "prism_index") < PRISM + 0.001


def test_ambiguity_names_the_reading_that_would_settle_it():
    """The flag on doubtful orders names where to look; what is found there settles the orders."""
    rows = film(1.98, 0.9)  # the sheet holds TE1 and TE2; TE0 and TE1 of another film are the likelier reading
    site = fit(unlabelled(rows[1:3]), thickness="{ fit = [200, 2000] }")
    text = flag_text(site, "order_ambiguous")
    assert orders(site) == [0, 1] and "would decide" in text
    where = float(text.split(", near ")[1].split(",")[0])
    found = min((r for r in rows if r[0] == "TE"), key=lambda r: abs(r[2] - where))
    assert abs(found[2] - where) > 0.05  # five u: the mode that is really there is not the one the best film has
    again = fit(unlabelled([*rows[1:3], found]), thickness="{ fit = [200, 2000] }")
    assert orders(again) == [1, 2, found[1]]
