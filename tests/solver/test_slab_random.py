"""Random stacks against references that share nothing with the solver: counts by stiffness, indices at 30 digits."""

from __future__ import annotations

import numpy as np
import pytest
from layerlot.solver.fields import mode_derivatives
from layerlot.solver.slab import all_modes, mode_count, mode_index
from mpmath import mp

from tests.reference import mp_slab, slab_stacks
from tests.reference.slab_stacks import Batch

# Layers, half-spaces included: 1 to 8 films.
LAYERS = range(3, 11)
STACKS_PER_COUNT = 38  # eight times 38 is 304 stacks


def report(batch: Batch, rows: np.ndarray) -> str:
    return "\n".join(batch.describe(i) for i in rows[:3])


@pytest.mark.parametrize("layers", LAYERS)
def test_indices_at_30_digits(layers):
    """Every mode of random stacks, contrasts 1e-3 to 2.5, uniaxial among them, meets mpmath to 1e-12."""
    batch = slab_stacks.generic(np.random.default_rng(100 + layers), STACKS_PER_COUNT, layers, strongest=20.0)
    found = all_modes(*batch.arguments())
    modes = 0
    for i in range(STACKS_PER_COUNT):
        expected = mp_slab.all_modes(batch.stack(i))
        mine = found[i][np.isfinite(found[i])]
        assert mine.size == len(expected), batch.describe(i)
        modes += mine.size
        assert all(abs(mp.mpf(float(a)) - b) <= 1e-12 for a, b in zip(mine, expected)), batch.describe(i)
    assert modes > STACKS_PER_COUNT


def test_comparison_sees_a_wrong_index():
    """The 30-digit reference tells an index that is off by 1e-12 from one that is right."""
    batch = slab_stacks.generic(np.random.default_rng(105), STACKS_PER_COUNT, 5, strongest=20.0)
    row = int(np.argmax(mode_count(*batch.arguments()) > 0))
    exact = mp_slab.all_modes(batch.stack(row))[0]
    found = float(all_modes(*batch.arguments())[row, 0])
    assert abs(mp.mpf(found * (1 + 1e-12)) - exact) > 1e-12 > 1e3 * abs(mp.mpf(found) - exact)


MAKERS = {
    "generic": [(slab_stacks.generic, k) for k in LAYERS],
    "thin layers": [(slab_stacks.thin, k) for k in (4, 5, 6, 7)],
    "coupled cores": [(slab_stacks.coupled, k) for k in (2, 3)],
    "near cut-off": [(slab_stacks.near_cut_off, k) for k in (3, 4, 5, 6)],
}
STACKS_PER_MAKER = {"generic": 1250, "thin layers": 750, "coupled cores": 2000, "near cut-off": 750}  # 20,000 in all


@pytest.mark.parametrize("kind", MAKERS)
def test_counts_of_20000_stacks(kind):
    """The number of modes equals the independent count in every one of 20,000 stacks."""
    rng = np.random.default_rng(20)
    for maker, k in MAKERS[kind]:
        batch = maker(rng, STACKS_PER_MAKER[kind], k)
        expected, _ = mp_slab.independent_count(*batch.arguments())
        found = mode_count(*batch.arguments())
        wrong = np.flatnonzero(found != expected)
        assert not wrong.size, f"{wrong.size} of {found.size}:\n{report(batch, wrong)}"
        assert expected.max() > 2
        assert np.isfinite(all_modes(*batch.arguments())).sum() == expected.sum()


@pytest.mark.nightly
@pytest.mark.parametrize("kind", MAKERS)
def test_counts_of_400000_stacks(kind):
    """As for 20,000 stacks, twenty times as many from another seed."""
    rng = np.random.default_rng(21)
    for maker, k in MAKERS[kind]:
        for _ in range(20):
            batch = maker(rng, STACKS_PER_MAKER[kind], k)
            expected, _ = mp_slab.independent_count(*batch.arguments())
            wrong = np.flatnonzero(mode_count(*batch.arguments()) != expected)
            assert not wrong.size, report(batch, wrong)


def misplaced(batch: Batch, N: np.ndarray, width: float) -> list[tuple[int, int]]:
    """Row and order of every mode that the independent count does not see change from m + 1 to m across N."""
    rows, orders = np.nonzero(np.isfinite(N))
    at, edge = N[rows, orders], mp_slab.cut_off(batch.n, batch.tm, batch.n_normal)[rows]
    parts = batch.n[rows], batch.t_um[rows], batch.wavelength_um[rows], batch.tm[rows], batch.n_normal[rows]
    above, _ = mp_slab.count_above(at + width, *parts)
    below, _ = mp_slab.count_above(np.maximum(at - width, edge), *parts)
    suspect = np.flatnonzero((above > orders) | ((below <= orders) & (at - width > edge)))
    wrong = []
    for r, m in zip(rows[suspect], orders[suspect]):
        # rounding of the double-precision count is settled at 60 digits
        with mp.workdps(60):
            stack, x = batch.stack(r), mp.mpf(float(N[r, m]))
            if not mp_slab.mp_count_above(stack, x + width) <= m < mp_slab.mp_count_above(stack, x - width):
                wrong.append((int(r), int(m)))
    return wrong


@pytest.mark.parametrize("cores", [2, 3])
def test_coupled_cores_are_kept_apart(cores):
    """Twin and triple cores, splittings from 1e-9 to none: each mode lies where the count changes, to 1e-12."""
    batch = slab_stacks.coupled(np.random.default_rng(30 + cores), 1000, cores)
    N = all_modes(*batch.arguments())
    gaps = -np.diff(N, axis=1)
    assert (gaps[np.isfinite(gaps)] >= 0).all()
    assert (gaps < 1e-9).sum() > 500  # the hard case is among them, and often
    assert not misplaced(batch, N, 1e-12)


@pytest.mark.parametrize("maker", [slab_stacks.generic, slab_stacks.thin, slab_stacks.near_cut_off])
def test_orders_lie_where_the_count_changes(maker):
    """Thousands of modes of mixed stacks: the independent count changes from m + 1 to m within 1e-12 of mode m."""
    batch = maker(np.random.default_rng(40), 1000, 6)
    N = all_modes(*batch.arguments())
    assert not misplaced(batch, N, 1e-12)
    # and the check can fail: moved by ten times its width, modes are misplaced
    assert misplaced(Batch(*(x[:50] for x in vars_of(batch))), N[:50] + 1e-11, 1e-12)


def vars_of(batch: Batch) -> tuple[np.ndarray, ...]:
    return batch.n, batch.t_um, batch.wavelength_um, batch.tm, batch.n_normal


def test_two_doors_agree():
    """`mode_index` gives the modes of `all_modes` order by order, and NaN for the order after the last."""
    for layers in (3, 6):
        batch = slab_stacks.generic(np.random.default_rng(50 + layers), 300, layers)
        n, t, lam, tm, normal = batch.arguments()
        N, counts = all_modes(n, t, lam, tm, normal), mode_count(n, t, lam, tm, normal)
        for m in range(N.shape[1] + 1):
            one = mode_index(n, t, lam, m, tm, normal)
            assert (np.isfinite(one) == (counts > m)).all()
            if m < N.shape[1]:
                assert np.nanmax(np.abs(one - N[:, m])) < 3e-15  # rounding of q = N^2 up to 12


@pytest.mark.parametrize("layers", LAYERS)
def test_derivatives_at_30_digits(layers):
    """Derivatives in every index, thickness and the wavelength meet differences taken at 50 digits to 1e-8."""
    rng = np.random.default_rng(200 + layers)
    batch = slab_stacks.generic(rng, 40, layers)
    counts = mode_count(*batch.arguments())
    checked = 0
    for i in np.flatnonzero(counts > 0)[:8]:
        stack = batch.stack(i)
        order = int(rng.integers(counts[i]))
        exact = mp_slab.mode(stack, order, mp_slab.isolate(stack, int(counts[i]))[order])
        normal = None if stack.n_normal is None else batch.n_normal[i]
        mine = mode_derivatives(float(exact), batch.n[i], batch.t_um[i], batch.wavelength_um[i], batch.tm[i], normal)
        for name, values in mp_slab.derivatives(stack, exact).items():
            wanted = np.array([float(x) for x in values])
            found = np.atleast_1d(getattr(mine, name))
            # An entry that is the small difference of field terms keeps the rounding of those terms: 1e-11 of the
            # largest entry, far below any reading.
            limit = 1e-8 * np.abs(wanted) + 1e-11 * np.abs(wanted).max(initial=0.0)
            assert (np.abs(found - wanted) <= limit).all(), f"{name} of order {order}, {batch.describe(i)}"
            checked += wanted.size
    assert checked >= 4 * (2 * layers - 1)  # at least four stacks with a mode


def test_derivatives_of_coupled_cores():
    """Twin cores split by 6e-7: each supermode has half of the lone core's slope in each core, as mpmath has it."""
    n, t, lam = [1.5, 2.0, 1.5, 2.0, 1.5], [0.4, 1.0, 0.4], 0.6328
    stack = mp_slab.Stack(n, t, lam)
    brackets = mp_slab.isolate(stack, int(mode_count(n, t, lam)))
    single = mode_derivatives(mode_index([1.5, 2.0, 1.5], [0.4], lam, 0), [1.5, 2.0, 1.5], [0.4], lam)
    for m in (0, 1):
        exact = mp_slab.mode(stack, m, brackets[m])
        mine = mode_derivatives(float(exact), n, t, lam)
        wanted = [float(x) for x in mp_slab.derivatives(stack, exact)["dn"]]
        # The rounding of N, 1e-16, over the splitting mixes the pair by 1e-9 of the slopes at most.
        assert np.abs(mine.dn - wanted).max() < 1e-8
        assert np.abs(mine.dn[[1, 3]] - single.dn[1] / 2).max() < 1e-4  # they do see each other


@pytest.mark.parametrize("tm", [False, True], ids=["TE", "TM"])
@pytest.mark.parametrize("barrier_um", [0.5, 5.0, 60.0, 500.0])
def test_slopes_behind_a_barrier_of_any_depth(barrier_um, tm):
    """A silicon film over 0.5 to 500 µm of oxide and a weaker film has the slopes it has alone."""
    lam = 1.55
    n, t = [1.0, 1.9, 1.444, 3.476, 1.0], [0.35, barrier_um, 0.3]
    N = mode_index(n, t, lam, 0, tm)
    slopes = mode_derivatives(N, n, t, lam, tm)
    # N(c n, c wavelength) = c N: sum n dN/dn = N - wavelength dN/dwavelength
    assert abs((np.array(n) * slopes.dn).sum() - (N - lam * slopes.dwavelength_per_um)) < 1e-12
    alone = mode_derivatives(mode_index([1.444, 3.476, 1.0], [0.3], lam, 0, tm), [1.444, 3.476, 1.0], [0.3], lam, tm)
    if barrier_um >= 5:  # the films do not see each other through more than 15 decay lengths
        assert np.abs(slopes.dn[2:] - alone.dn).max() < 1e-9
        assert abs(slopes.dt_per_um[2] - alone.dt_per_um[0]) < 1e-9


def test_zero_thickness_and_split_layers_change_nothing():
    """A film of no thickness, or one cut in two, leaves every mode where it was."""
    for tm in (False, True):
        plain = all_modes([1.457, 1.98, 1.0], [0.9], 0.6328, tm)
        for n, t in (
            ([1.457, 2.3, 1.98, 1.0], [0.0, 0.9]),
            ([1.457, 1.98, 1.98, 1.0], [0.4, 0.5]),
            ([1.457, 1.457, 1.98, 1.0, 1.0], [0.7, 0.9, 0.2]),
        ):
            assert np.abs(all_modes(n, t, 0.6328, tm) - plain).max() < 1e-14


@pytest.mark.parametrize(
    ("n", "t", "lam", "words"),
    [
        ([1.5, 2.0], [], 0.6, "at least 3 layers"),
        ([1.5, 2.0, 1.0], [0.1, 0.2], 0.6, "must hold 1 thicknesses"),
        ([1.5, 2.0, 1.0], [-0.1], 0.6, "not be negative"),
        ([1.5, float("nan"), 1.0], [0.1], 0.6, "none may be NaN"),
        ([1.5, 2.0, 1.0], [0.1], 0.0, "must be positive"),
    ],
)
def test_refused_stacks(n, t, lam, words):
    """Stacks of wrong shape or sign are refused with what is required."""
    with pytest.raises(ValueError, match=words):
        mode_count(n, t, lam)
