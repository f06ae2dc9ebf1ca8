"""The slab reference itself: its count against more digits, and its modes against a textbook relation."""

from __future__ import annotations

import numpy as np
from mpmath import mp

from tests.reference import mp_slab
from tests.reference.slab_stacks import coupled, generic, thin

# Two films of 1e-7 µm between others of 0.5 µm: their stiffnesses are 1e7 times the rest and nearly cancel.
VERY_THIN = mp_slab.Stack(
    [2.0444323764012777, 2.292334684088213, 2.6995279661433402, 2.3796642582527143, 2.342771252364563]
    + [2.3736243313922594, 2.942032592388161, 2.4590366625529816, 2.0224911132617693],
    [0.028501843480564053, 1.011253738090507e-07, 0.0036065115031360014, 0.5322991085568995, 4.396315618072979e-07]
    + [0.5452223499774974, 0.39965526779799726],
    0.7129257945935525,
    True,
)


def test_double_precision_count_is_right_wherever_it_claims_to_be():
    """At random indices, and 1e-13 beside modes, the count in doubles is that of 60 digits or is marked as doubtful."""
    rng = np.random.default_rng(70)
    sure = 0
    for batch in (generic(rng, 40, 6), thin(rng, 40, 8), coupled(rng, 40, 2)):
        edge = mp_slab.cut_off(batch.n, batch.tm, batch.n_normal)
        top = np.where(batch.tm[:, None], batch.n_normal, batch.n)[:, 1:-1].max(axis=1)
        for i in range(40):
            stack = batch.stack(i)
            at = [edge[i] + (top[i] - edge[i]) * rng.random()]
            at += [x + s for x in map(float, mp_slab.all_modes(stack)[:2]) for s in (-1e-13, 1e-13) if x + s > edge[i]]
            row = [np.repeat(x[i : i + 1], len(at), axis=0) for x in batch.arguments()]
            counts, doubt = mp_slab.count_above(np.array(at), *row)
            with mp.workdps(60):
                exact = [mp_slab.mp_count_above(stack, mp.mpf(x)) for x in at]
            assert (doubt | (counts == exact)).all(), batch.describe(i)
            sure += int((~doubt).sum())
    assert sure > 120  # the claim is made for most


def test_modes_of_very_thin_films_are_found():
    """Brackets stay right where the stiffness of very thin films leaves a count in doubles without digits."""
    modes = mp_slab.all_modes(VERY_THIN)
    with mp.workdps(60):
        assert len(modes) == mp_slab.mp_count_above(VERY_THIN, mp.mpf(VERY_THIN.n[0]))
    assert modes == sorted(set(modes), reverse=True)


def test_modes_of_one_film_obey_the_textbook_relation():
    """kappa t = m pi + atan(p gamma_s / kappa) + atan(r gamma_c / kappa) for each mode, to 1e-25 (H. Kogelnik,

    Topics in Applied Physics 7, ch. 2, 1975; p, r = (n_f / n_s,c)^2 for TM, 1 for TE).
    """
    n_s, n_f, n_c, t, lam = 1.457, 1.59, 1.0, 2.0, 0.6328
    for tm in (False, True):
        modes = mp_slab.all_modes(mp_slab.Stack([n_s, n_f, n_c], [t], lam, tm))
        assert len(modes) == 4
        with mp.workdps(40):
            for m, N in enumerate(modes):
                f, s, c = (mp.mpf(x) ** 2 for x in (n_f, n_s, n_c))
                kappa = mp.sqrt(f - N**2)
                p, r = (f / s, f / c) if tm else (1, 1)
                edges = mp.atan(p * mp.sqrt(N**2 - s) / kappa) + mp.atan(r * mp.sqrt(N**2 - c) / kappa)
                miss = 2 * mp.pi / mp.mpf(lam) * t * kappa - m * mp.pi - edges
                assert abs(miss) < mp.mpf(10) ** -25
                assert abs(miss + mp.pi / 1000) > mp.mpf(10) ** -25
