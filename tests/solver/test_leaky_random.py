"""Leaky modes of random stacks against 30-digit references and against a count of zeros in the complex plane."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.solver.complex_search import complex_modes
from layerlot.solver.leaky import leaky_derivatives, leaky_index, loss_dB_per_cm

from tests.reference import mp_slab
from tests.reference.mp_slab import Stack

SILICON = {0.6328: 3.85, 1.55: 3.476}  # round numbers near silicon's index, absorption left out
KINDS = ["film on oxide", "film on silicon", "two films on oxide", "under a dense cover"]


def random_stack(rng: np.random.Generator, kind: str) -> Stack:
    """One stack that radiates into one half-space; every third one has a uniaxial film."""
    lam = float(rng.choice([0.6328, 1.55]))
    dense, film = SILICON[lam], rng.uniform(1.6, 2.2)
    if kind == "film on oxide":
        n, t = [dense, 1.457, film, 1.0], [10 ** rng.uniform(-1, 0.6), rng.uniform(0.2, 3)]
    elif kind == "film on silicon":
        n, t = [dense, film, 1.0], [rng.uniform(0.3, 4)]
    elif kind == "two films on oxide":
        n = [dense, 1.457, film, rng.uniform(1.5, 1.59), 1.0]
        t = [10 ** rng.uniform(-1, 0.6), rng.uniform(0.2, 2), rng.uniform(0.1, 1)]
    else:
        n, t = [1.457, film, rng.uniform(1.5, 1.6), 1.48, dense], [rng.uniform(0.4, 2), *rng.uniform(0.1, 1, 2)]
    normal = None
    if rng.random() < 1 / 3:
        normal = list(n)
        normal[n.index(film)] -= 0.02
    return Stack(n, t, lam, bool(rng.random() < 0.5), normal)


def arguments(stack: Stack) -> tuple:
    return stack.n, stack.t_um, stack.wavelength_um


def leaks_into(stack: Stack, N: complex) -> tuple[bool, bool]:
    return stack.n[0] > N.real, stack.n[-1] > N.real


@pytest.mark.parametrize("kind", KINDS)
def test_random_leaky_modes_at_30_digits(kind):
    """Every order found is a mode to 1e-12, no two orders share one, and none in the middle is missing."""
    rng = np.random.default_rng(80 + KINDS.index(kind))
    modes = 0
    for _ in range(16):
        stack = random_stack(rng, kind)
        found = leaky_index(*arguments(stack), np.arange(30), stack.tm, stack.n_normal)
        held = np.isfinite(found)
        assert not held[held.sum() :].any(), stack
        assert (np.diff(found[held].real) < -1e-6).all(), stack
        for N in found[held]:
            exact = mp_slab.complex_mode(stack, complex(N), leaks_into(stack, N))
            assert abs(exact - complex(N)) < 1e-12, stack
            assert N.imag <= 0
        modes += held.sum()
    assert modes > 16


@pytest.mark.parametrize("kind", KINDS)
def test_random_leaky_derivatives_at_30_digits(kind):
    """Complex slopes in every index, thickness and the wavelength meet differences at 50 digits to 1e-8."""
    rng = np.random.default_rng(90 + KINDS.index(kind))
    checked = 0
    while checked < 6:
        stack = random_stack(rng, kind)
        found = leaky_index(*arguments(stack), np.arange(8), stack.tm, stack.n_normal)
        if not np.isfinite(found).any():
            continue
        N = complex(rng.choice(found[np.isfinite(found)]))
        outgoing = leaks_into(stack, N)
        exact = mp_slab.complex_mode(stack, N, outgoing)
        mine = leaky_derivatives(complex(exact), *arguments(stack), stack.tm, stack.n_normal)
        for name, values in mp_slab.derivatives(stack, exact, outgoing).items():
            wanted, one = np.array([complex(x) for x in values]), np.atleast_1d(getattr(mine, name))
            # 1e-8 of each entry; entries that are small differences keep the rounding of the largest
            limit = 1e-8 * np.abs(wanted) + 1e-12 * np.abs(wanted).max(initial=0.0)
            assert (np.abs(one - wanted) <= limit).all(), (name, N, stack)
        checked += 1


def test_orders_hold_through_the_brewster_angle():
    """TM modes of a thick film on bare silicon keep one order each from grazing to steep, as a search finds them."""
    n, t, lam = [3.85, 1.739, 1.0], [3.9], 0.6328
    orders = leaky_index(n, t, lam, np.arange(30), True)
    orders = orders[np.isfinite(orders)]
    # film wave at Brewster's angle to silicon: N = 1.739 * 3.85 / hypot(1.739, 3.85) = 1.585
    assert orders[0].real > 1.73 and orders[-1].real < 1.1
    search = complex_modes(n, t, lam, True, re_range=(1.01, 1.74), loss_limit_dB_per_cm=1e5)
    assert search.size == (orders.real > 1.01).sum()
    assert np.abs(search - orders[: search.size]).max() < 1e-10


def zeros_inside(stack: Stack, low: float, high: float, loss: float) -> int:
    """Zeros of the mode condition with Re N in (low, high) Im N in (-loss, loss / 20): turns of its phase."""
    outgoing = leaks_into(stack, complex((low + high) / 2))
    corners = [low - 1j * loss, high - 1j * loss, high + 0.05j * loss, low + 0.05j * loss]
    turns = 0.0
    for a, b in zip(corners, corners[1:] + corners[:1]):
        many = 20 + int(abs(b - a) / 0.002)  # a dozen between two modes, or more
        points = [a + (b - a) * k / many for k in range(many + 1)]
        values = [complex(mp_slab.mismatch(stack, x, outgoing)) for x in points]
        k = 0
        while k + 1 < len(points):
            step = np.angle(values[k + 1] / values[k])
            if abs(step) > 0.8 and abs(points[k + 1] - points[k]) > 1e-9:
                points.insert(k + 1, (points[k] + points[k + 1]) / 2)
                values.insert(k + 1, complex(mp_slab.mismatch(stack, points[k + 1], outgoing)))
            else:
                turns += step
                k += 1
    return round(turns / (2 * np.pi))


@pytest.mark.parametrize("kind", KINDS)
def test_search_finds_as_many_modes_as_the_plane_holds(kind):
    """The number of modes found in a window equals the argument principle's count of zeros (complex analysis)."""
    rng = np.random.default_rng(100 + KINDS.index(kind))
    counted = 0
    for _ in range(2):
        stack = random_stack(rng, kind)
        low = max(x for x in stack.n if x < 1.5) + 0.004
        high, loss = max(x for x in stack.n if x < 2.5) - 1e-3, 0.006
        limit = float(loss_dB_per_cm(-1j * loss, stack.wavelength_um))
        found = complex_modes(*arguments(stack), stack.tm, stack.n_normal, (low, high), limit)
        assert found.size == zeros_inside(stack, low, high, loss), (stack, found)
        counted += found.size
    assert counted >= 2
