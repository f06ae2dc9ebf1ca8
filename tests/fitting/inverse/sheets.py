"""Small stacks and sheets for the tests of the inverse step; angles from the independent field model."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from layerlot.fitting.records import FitResult, Place, Quantity, Reading, SiteResult
from layerlot.fitting.stack import Stack, parse_stack

from tests.reference.field_model import coupling_angle_deg, guided_modes

PRISM = 2.1745
SUBSTRATE = 1.457


def stack(
    index: str = "{ fit = [1.88, 2.07] }",
    thickness: str = "{ fit = [250, 1200] }",
    *,
    normal: str = "",
    substrate: str = f"{{ value = {SUBSTRATE}, u = 0.0005 }}",
    prism: str = f"{{ value = {PRISM}, u = 0.0002 }}",
    more: str = "",
) -> Stack:
    """One film on a substrate in air, read through a 60 degree prism with a table zero known to 0.01 degrees."""
    uniaxial = f"index_normal = {normal}" if normal else ""
    return parse_stack(
        f"""
        title = "test"
        [[layer]]
        name = "substrate"
        index = {substrate}
        {more}
        [[layer]]
        name = "core"
        index = {index}
        {uniaxial}
        thickness_nm = {thickness}
        [[layer]]
        name = "cover"
        index = 1.0
        [prism]
        index = {prism}
        base_angle_deg = 60.0
        angle_offset_deg = {{ value = 0.0, u = 0.01 }}
        angle_u_deg = 0.01
        """,
        "test.toml",
    )


Row = tuple[str, int | None, float, float]  # polarisation, order, angle in degrees, wavelength in nm


def film(
    n: float,
    t_um: float,
    *,
    wavelength_nm: float = 632.8,
    normal: float | None = None,
    prism: float = PRISM,
    noise: np.random.Generator | None = None,
) -> list[Row]:
    """Every mode of a film that a prism reaches, TE then TM, with 0.01 degrees of reading noise if asked for."""
    rows: list[Row] = []
    m = normal or n
    for tm in (False, True):
        modes = guided_modes(
            np.array([[SUBSTRATE, n, 1.0]]), np.array([[t_um]]), wavelength_nm / 1000, tm,
            np.array([[SUBSTRATE, m, 1.0]]),
        )[0]  # fmt: skip
        for order, N in enumerate(modes[np.isfinite(modes)]):
            angle = float(coupling_angle_deg(np.array(N), prism, 60.0))
            if np.isfinite(angle):
                error = 0.01 * noise.standard_normal() if noise is not None else 0.0
                rows.append(("TM" if tm else "TE", order, angle + error, wavelength_nm))
    return rows


def unlabelled(rows: Iterable[Row]) -> list[Row]:
    return [(pol, None, angle, wave) for pol, _, angle, wave in rows]


def readings(rows: Iterable[Row], site: str = "1", wafer: str | None = "W1", lot: str | None = "L1") -> list[Reading]:
    return [
        Reading(
            Quantity.ANGLE, angle, wave / 1000, pol, Place("test.csv", None, k), order, site=site, wafer=wafer, lot=lot
        )
        for k, (pol, order, angle, wave) in enumerate(rows, start=2)
    ]


def value(site: SiteResult, quantity: str, axis: str | None = None, wavelength_nm: float | None = None) -> float:
    """The core's estimate of a quantity."""
    return next(
        e.value
        for e in site.estimates
        if e.layer == "core" and e.quantity == quantity and axis in (None, e.axis)
        and wavelength_nm in (None, e.wavelength_nm)
    )  # fmt: skip


def codes(site: SiteResult) -> set[str]:
    return {f.code for f in site.flags}


def asked_for(site: SiteResult) -> list[str]:
    """Names of the core's numbers that were written."""
    return sorted(e.quantity for e in site.estimates if e.layer == "core")


def only(result: FitResult) -> SiteResult:
    assert len(result.sites) == 1
    return result.sites[0]


def orders(site: SiteResult) -> Sequence[int | None]:
    return [r.order if r.used else None for r in site.readings]
