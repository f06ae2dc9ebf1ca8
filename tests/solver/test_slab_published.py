"""Guided modes against published and closed-form values (reference/slab.json names the source of every number)."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from layerlot.solver.fields import mode_derivatives
from layerlot.solver.prism import coupling_angle_deg, effective_index
from layerlot.solver.slab import all_modes, mode_count, mode_index

CHECKS = {c["id"]: c for c in json.loads((Path(__file__).parents[1] / "reference" / "slab.json").read_text())["checks"]}
POLARISATIONS = pytest.mark.parametrize("pol", ["TE", "TM"])

# Cover, film, substrate, film thickness in µm, as the entries' descriptions say.
THREE_LAYER = {
    "slab3-asym-glass-1/1.62/1.515": (1.0, 1.62, 1.515, 1.0),
    "slab3-SOI-slab-1.444/3.476/1.444": (1.444, 3.476, 1.444, 0.22),
    "slab3-SOI-slab-1/3.476/1.444": (1.0, 3.476, 1.444, 0.22),
    "slab3-SiN-slab-1.444/1.9963/1.444": (1.444, 1.9963, 1.444, 0.4),
    "slab3-GaAs-1_3.44_3.34-d=0.2": (1.0, 3.44, 3.34, 0.2),
    "slab3-GaAs-1_3.44_3.36-d=1.0": (1.0, 3.44, 3.36, 1.0),
    "slab3-GaAs-1_3.44_3.36-d=0.9": (1.0, 3.44, 3.36, 0.9),
}


def agrees(found: np.ndarray, expected: list, tolerance: float) -> bool:
    """Same number of modes, each within the tolerance."""
    wanted = np.array([float(x) for x in expected])
    found = found[np.isfinite(found)]
    return found.shape == wanted.shape and bool((np.abs(found - wanted) <= tolerance).all())


def from_substrate(inputs: dict) -> tuple[list[float], list[float]]:
    """Indices and thicknesses from the substrate up of an entry that lists its films from the cover down."""
    films = inputs["layers"][::-1]
    return [inputs["n_substrate"], *(f["n"] for f in films), inputs["n_cover"]], [f["d_um"] for f in films]


@POLARISATIONS
def test_four_films_of_the_published_example(pol):
    """Four films between air and glass have the published modes, to all twelve digits of their exact values."""
    check = CHECKS["slab-CH4"]
    n, t = from_substrate(check["inputs"])
    # half a unit of the twelfth digit
    assert agrees(all_modes(n, t, 0.6328, pol == "TM"), check["expected"][pol], 5.1e-13)


@POLARISATIONS
def test_order_of_the_films_matters(pol):
    """With the two middle films exchanged the modes are those of the exchanged stack, and no longer the others."""
    check = CHECKS["slab-CH4-swapped"]
    n, t = from_substrate(check["inputs"])
    found = all_modes(n, t, 0.6328, pol == "TM")
    assert agrees(found, check["expected"][pol], 2e-9)
    assert not agrees(found, CHECKS["slab-CH4"]["expected"][pol], 1e-4)


@POLARISATIONS
@pytest.mark.parametrize("which", THREE_LAYER)
def test_three_layer_stacks(which, pol):
    """Glass, silicon, nitride and gallium arsenide films, one of them below cut-off, have the modes listed (1e-10)."""
    check = CHECKS[which]
    cover, film, substrate, t = THREE_LAYER[which]
    lam = check["inputs"].get("wavelength_um", 1.55)
    found = all_modes([substrate, film, cover], [t], lam, pol == "TM")
    assert agrees(found, check["expected"][pol], 1e-10)
    orders = np.arange(len(check["expected"][pol]) + 1)
    by_order = mode_index([substrate, film, cover], [t], lam, orders, pol == "TM")
    assert agrees(by_order[:-1], check["expected"][pol], 1e-10) and np.isnan(by_order[-1])


@pytest.mark.parametrize("which", ["a=0", "a=1", "a=10"])
def test_normalised_curves(which):
    """b(V) of the symmetric and asymmetric three-layer guide, TE0 to TE2, absent modes included, to 1e-11."""
    a = float(which[2:])
    n_f, n_s = 1.6, 1.58  # leaves a real cover index at a = 10
    span = n_f**2 - n_s**2
    n_c = np.sqrt(n_s**2 - a * span)
    for m in range(3):
        for V, b in CHECKS["KR-b"]["expected"][f"{which},m={m}"].items():
            t = float(V) / (2 * np.pi * np.sqrt(span))
            N = float(mode_index([n_s, n_f, n_c], [t], 1.0, m))
            if b is None:
                assert np.isnan(N)
            else:
                # 2e-15 in N is 2e-14 in b; the listed digits end at 5e-13.
                assert abs((N**2 - n_s**2) / span - b) < 1e-11


ASYMMETRY = [k for k in CHECKS if k.startswith("KR-a")]


@POLARISATIONS
@pytest.mark.parametrize("which", ASYMMETRY)
def test_asymmetry_from_the_cut_off_thickness(which, pol):
    """The thickness at which order 0 appears, found by counting, gives the tabulated asymmetry tan^2 V."""
    check = CHECKS[which]
    n_s, n_f, n_c = (float(x) for x in check["inputs"]["n_sub_film_cover"].split("/"))
    n, per_V = [n_s, n_f, n_c], 1 / (2 * np.pi * np.sqrt(n_f**2 - n_s**2))
    low, high = 0.0, np.pi / 2
    for _ in range(60):
        mid = (low + high) / 2
        low, high = (low, mid) if mode_count(n, [mid * per_V], 1.0, pol == "TM") else (mid, high)
    measure = np.tan(high) ** 2
    digits = {0.0: 1e-15}.get(check["expected"][f"a_{pol}"], 1e-3)
    assert abs(measure - check["expected"][f"a_{pol}"]) < digits
    printed = check["expected"]["printed"][pol == "TM"]
    # one unit of the last printed digit: see `known_slips` of the reference file
    assert abs(measure - printed) <= (0.1 if isinstance(printed, float) else 1.0)


def stairs(epsilon, edges_um: np.ndarray, n_s: float, n_c: float, modes: int) -> np.ndarray:
    """TE modes of a graded profile in steps that have the permittivity of their middles."""
    n = np.sqrt(epsilon((edges_um[1:] + edges_um[:-1]) / 2))
    return mode_index([n_s, *n, n_c], np.diff(edges_um), 0.6328, np.arange(modes))


def test_sech_squared_profile():
    """200 steps meet the exact modes of a sech^2 profile to 2e-6; extrapolated in the step, to 1e-9."""
    given, expected = CHECKS["sech2"]["inputs"], np.array(CHECKS["sech2"]["expected"]["N_exact"])
    n_s, low, high = given["ns"], given["ns"] ** 2, given["n0"] ** 2

    def steps(half_um, count):
        edges = np.linspace(-half_um, half_um, count + 1)
        return stairs(lambda x: low + (high - low) / np.cosh(2 * x / given["h_um"]) ** 2, edges, n_s, n_s, 9)

    # The mode next to cut-off reaches far out: 40 µm each way leaves less than 1e-6 of the index step.
    assert np.abs((4 * steps(40, 800) - steps(40, 400)) / 3 - expected).max() < 1e-9
    listed = steps(25, 200)
    assert 1e-9 < np.abs(listed - expected).max() < 2e-6
    assert np.abs(listed - CHECKS["sech2"]["expected"]["N_staircase200"]).max() < 1e-14


def test_exponential_profile():
    """An exponential profile under air has the modes of its Bessel-function solution to 1e-8."""
    given, expected = CHECKS["exp-profile"]["inputs"], np.array(CHECKS["exp-profile"]["expected"])
    low, high = given["ns"] ** 2, given["n0"] ** 2
    depth = 75.0  # the index step has fallen to 1e-12 there

    def steps(count):
        # finer towards the surface, smoothly: halving every step still takes three quarters of the error
        edges = depth * (1 - np.linspace(1, 0, count + 1) ** 2)
        return stairs(lambda x: low + (high - low) * np.exp((x - depth) / given["d_um"]), edges, given["ns"], 1.0, 9)

    assert np.abs((4 * steps(600) - steps(300)) / 3 - expected).max() < 1e-8


@POLARISATIONS
@pytest.mark.parametrize("which", ["prism-polymer", "prism-SiON-like"])
def test_prism_coupled_films(which, pol):
    """Modes of two films on glass and the angles at which a prism of index 2.8719 and base 45° couples to them."""
    check = CHECKS[which]
    film, substrate, t = {"prism-polymer": (1.59, 1.457, 2.0), "prism-SiON-like": (1.52, 1.457, 3.0)}[which]
    expected = check["expected"][pol]
    found = all_modes([substrate, film, 1.0], [t], 0.6328, pol == "TM")
    assert agrees(found, expected["N"], 5.1e-9)  # eight digits are listed
    angles = coupling_angle_deg(found, 2.8719, 45.0)
    assert np.abs(angles - expected["angle_deg"]).max() < 1e-6
    assert np.abs(effective_index(angles, 2.8719, 45.0) - found).max() < 1e-14


@pytest.mark.parametrize("which", ["prism-polymer", "prism-SiON-like"])
def test_prism_coupled_films_determine_index_and_thickness(which):
    """The TE sensitivities have the listed digits, and with them the listed covariance for u(N) = 1e-4."""
    check = CHECKS[which]
    film, substrate, t = {"prism-polymer": (1.59, 1.457, 2.0), "prism-SiON-like": (1.52, 1.457, 3.0)}[which]
    n = [substrate, film, 1.0]
    N = all_modes(n, [t], 0.6328)
    slopes = mode_derivatives(N, n, [t], 0.6328)
    jacobian = np.column_stack([slopes.dn[:, 1], slopes.dt_per_um[:, 0]])
    assert np.abs(jacobian - check["expected"]["jac_TE"]).max() < 6e-7  # six digits are listed
    cov = np.linalg.inv(jacobian.T @ jacobian) * 1e-8
    u = np.sqrt(np.diag(cov))
    u_n, u_t, correlation = check["expected"]["sigma_n__sigma_d_um__corr_for_sigmaN_1e_4"]
    assert u == pytest.approx([u_n, u_t], rel=0.01)
    assert cov[0, 1] / u.prod() == pytest.approx(correlation, rel=0.01)
