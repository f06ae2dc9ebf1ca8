"""Films on silicon: strictly nothing is guided there, and the fit still finds the film."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from layerlot.fitting.inverse import fit_table
from layerlot.fitting.records import Quantity, Status
from layerlot.fitting.stack import parse_stack

from tests.reference.field_model import leaky_modes

from .sheets import only, orders, readings

CASES = {
    # name: layers between silicon and air as (index, thickness in nm), the film last; what the stack file says of them
    "nitride on oxide": (
        [(1.457, 900.0), (1.98, 500.0)],
        "index = 1.457\nthickness_nm = { value = 900, u = 5 }",
        "index = { fit = [1.90, 2.05] }\nthickness_nm = { fit = [300, 700] }",
    ),
    "thin oxide": (
        [(1.457, 350.0), (1.98, 700.0)],
        "index = 1.457\nthickness_nm = { value = 350, u = 1 }",
        "index = { fit = [1.90, 2.05] }\nthickness_nm = { fit = [300, 900] }",
    ),
}


def sheet(layers, noise):
    """Every mode that the independent leaky model finds, as effective indices with u = 1e-4."""
    n = np.array([[3.85, *(x for x, _ in layers), 1.0]])
    t = np.array([[d / 1000 for _, d in layers]])
    rows = []
    for tm in (False, True):
        modes = leaky_modes(n, t, 0.6328, tm)[0].real
        modes = np.sort(modes[np.isfinite(modes) & (modes > 1.46)])[::-1]
        rows += [("TM" if tm else "TE", m, N + 1e-4 * noise.standard_normal(), 632.8) for m, N in enumerate(modes)]
    return [replace(r, quantity=Quantity.EFFECTIVE_INDEX, u=1e-4) for r in readings(rows)]


@pytest.mark.parametrize("labelled", [True, False], ids=["labelled", "unlabelled"])
@pytest.mark.parametrize("name", CASES)
def test_film_on_oxide_on_silicon(name, labelled):
    """Index and thickness come back within their uncertainty from modes of the independent leaky model."""
    layers, oxide, film = CASES[name]
    text = (
        f'[[layer]]\nname = "silicon"\nindex = 3.85\n[[layer]]\nname = "oxide"\n{oxide}\n'
        f'[[layer]]\nname = "core"\n{film}\n[[layer]]\nname = "air"\nindex = 1.0\n'
    )
    rows = sheet(layers, np.random.default_rng(21))
    given = rows if labelled else [replace(r, order=None) for r in rows]
    result = fit_table(parse_stack(text, "x"), given)
    site = only(result)
    assert site.status is Status.OK and orders(site) == [r.order for r in rows]
    for e in site.estimates:
        if e.layer == "core":
            truth = layers[-1][0] if e.quantity == "index" else layers[-1][1]
            assert abs(e.value - truth) < 3.5 * e.u  # 1 in 2,000, fixed seed
    assert any("leak" in sentence for sentence in result.conventions)
