"""Invented results for the tests of the reports. No fit was made: numbers are drawn so that they hang together."""

from __future__ import annotations

import math

import numpy as np
from layerlot.fitting.flags import flag
from layerlot.fitting.records import (
    BudgetLine,
    Estimate,
    FitQuality,
    FitResult,
    FittedReading,
    GroupMean,
    InputFile,
    Place,
    Quantity,
    Reading,
    Rival,
    SiteResult,
    Status,
)

CONVENTIONS = (
    "Wavelengths are vacuum wavelengths; indices are relative to vacuum.",
    "fused silica (substrate): datasets/catalogue, 0.21 to 3.71 µm, 20 °C.",
    "Prism: base angle 45°, one angle reading u = 0.01°.",
)
SHARED_PARTS = (("prism index", 0.7), ("base angle", 0.6), ("table zero", 0.38))


def estimate(
    quantity, value, u_random, u_shared, *, layer="nitride", nm=None, axis=None, skew=0.0, origin="fitted", prior=None
):
    """One estimate with both parts; skew widens the upper side of the 95 % interval."""
    u = math.hypot(u_random, u_shared)
    unit = {"index": "1", "thickness": "nm", "base_angle": "deg", "angle_offset": "deg", "prism_index": "1"}[quantity]
    return Estimate(
        layer=layer, quantity=quantity, value=value, u=u, u_random=u_random, u_shared=u_shared,
        low95=value - 1.96 * u * (1 - skew), high95=value + 1.96 * u * (1 + skew), unit=unit, origin=origin,
        axis=axis if axis or quantity != "index" else "any", wavelength_nm=nm,
        interval="profile" if skew else "parabolic", prior=prior,
    )  # fmt: skip


def budget_of(estimates):
    """Lines whose squares add up to u² of each estimate."""
    lines = []
    for e in estimates:
        parts = [("reading noise", "random", e.u_random)]
        parts += [(source, "shared", e.u_shared * share) for source, share in SHARED_PARTS]
        rest = e.u_shared * math.sqrt(max(0.0, 1 - sum(s**2 for _, s in SHARED_PARTS)))
        parts.append(("noise of all readings, through the shared quantities", "shared", rest))
        lines += [BudgetLine(s, k, e.layer, e.quantity, e.axis, e.wavelength_nm, u, e.unit) for s, k, u in parts]
    return tuple(lines)


def readings_of(rng, first_row, *, nm=(632.8,), modes=("TE0", "TE1", "TM0", "TM1"), u=0.01, place=None, scatter=1.0):
    """Used readings at made-up angles with normal noise."""
    place = place or {}
    out = []
    for w in nm:
        for mode in modes:
            pol, order = mode[:2], int(mode[2:])
            predicted = 24.0 - 11.3 * order - (1.7 if pol == "TM" else 0.0) - 0.002 * (w - 632.8)
            value = round(predicted + scatter * u * rng.standard_normal(), 4)
            reading = Reading(
                Quantity.ANGLE,
                value,
                w / 1000,
                pol,
                Place("monitor.xlsx", "angles", first_row + len(out)),
                order=order,
                **place,
            )
            out.append(FittedReading(reading, order, predicted, u, True))
    return out


def site(
    name, readings, estimates, *, wafer="W1", lot="HF-0412", flags=(), notes=(), rivals=(), x=None, y=None, fitted=True
):
    """A site result; failed where it has no estimates."""
    status = Status.FAILED if not estimates else Status.FLAGGED if flags else Status.OK
    used = [r for r in readings if r.used]
    chi2 = float(sum(((r.reading.value - r.predicted) / r.u) ** 2 for r in used))
    dof = max(len(used) - len(estimates), 0)
    quality = FitQuality(
        chi2, dof, math.exp(-chi2 / 2 / max(dof, 1)) if dof else None, len(used), len(readings) - len(used)
    )
    corr = np.full((len(estimates), len(estimates)), -0.6)
    np.fill_diagonal(corr, 1.0)
    return SiteResult(
        lot=lot, wafer=wafer, site=name, x_mm=x, y_mm=y, measured_at=None, status=status, flags=tuple(flags),
        notes=tuple(notes), estimates=tuple(estimates), correlation=corr, fit=quality if fitted else None,
        readings=tuple(readings), rivals=tuple(rivals), budget=budget_of(estimates),
    )  # fmt: skip


def mean_of(level, members, lot, wafer, k=0):
    """Means of every quantity over the ok sites of a wafer or lot, shared part kept."""
    good = [s for s in members if s.status is Status.OK]
    out = []
    for i, e in enumerate(good[0].estimates if good else ()):
        if e.origin == "known":
            continue
        values = np.array([s.estimates[i].value for s in good])
        u_random = e.u_random / math.sqrt(len(good))
        u = math.hypot(u_random, e.u_shared)
        spread = float(values.std(ddof=1)) if len(good) > 1 else None
        left = None if spread is None or spread <= e.u_random else math.sqrt(spread**2 - e.u_random**2)
        value = float(values.mean())
        out.append(
            GroupMean(
                level, lot, wafer, e.layer, e.quantity, e.axis, e.wavelength_nm, e.unit, value, u, u_random, e.u_shared,
                value - 1.96 * u, value + 1.96 * u, spread, left, len(good), len(members) - len(good),
            )
        )  # fmt: skip
    return out


def means_of(sites):
    """Wafer means, then the lot mean."""
    wafers, lots = {}, {}
    for s in sites:
        wafers.setdefault((s.lot, s.wafer), []).append(s)
        lots.setdefault(s.lot, []).append(s)
    out = [m for (lot, wafer), members in wafers.items() for m in mean_of("wafer", members, lot, wafer)]
    return tuple(out + [m for lot, members in lots.items() if lot for m in mean_of("lot", members, lot, None)])


def shared_of(zero=0.004):
    """Prism index, base angle and table zero as the table leaves them."""
    return (
        estimate("prism_index", 2.50123, 0, 0.00019, layer=None, origin="known", prior=(2.5012, 0.0002)),
        estimate("base_angle", 45.0031, 0, 0.0091, layer=None, origin="known", prior=(45.0, 0.01)),
        estimate("angle_offset", zero, 0, 0.0042, layer=None, prior=(0.0, 0.01)),
    )


def result(sites, **more):
    """A whole result."""
    return FitResult(
        **{
            "title": "Nitride on fused silica (invented)",
            "version": "0.1.0",
            "inputs": (
                InputFile("nitride_on_silica.toml", "ab" * 32),
                InputFile("monitor.xlsx", "0123456789abcdef" * 4),
            ),
            "sites": tuple(sites),
            "means": means_of(sites),
            "shared": shared_of(),
            "conventions": CONVENTIONS,
        }
        | more
    )


def film(rng, *, index=1.9921, thickness=402.3, nm=(632.8,), **more):
    """Index per wavelength and thickness of a nitride film."""
    values = [
        estimate(
            "index", index - 4.5e-5 * (w - 632.8) / 2 + 2e-4 * rng.standard_normal(), 0.00021, 0.00032, nm=w, **more
        )
        for w in nm
    ]
    return [*values, estimate("thickness", thickness + 0.6 * rng.standard_normal(), 0.21, 0.32)]


SPOTS = ((0.0, 0.0), (35.0, 0.0), (0.0, 35.0), (-35.0, 0.0), (0.0, -35.0))


def good():
    """Two wafers of five sites, all ok, with x and y."""
    rng = np.random.default_rng(1)
    sites = []
    for w in ("W1", "W2"):
        for k, (x, y) in enumerate(SPOTS):
            place = {"lot": "HF-0412", "wafer": w, "site": str(k + 1)}
            readings = readings_of(rng, 5 + 4 * len(sites), place=place)
            thickness = 402.3 - 0.0012 * (x * x + y * y) + (1.4 if w == "W2" else 0.0)
            sites.append(site(str(k + 1), readings, film(rng, thickness=thickness), wafer=w, x=x, y=y))
    return result(sites)


def bad():
    """Five sites of one wafer: one ok, a poor fit with a stray, one ambiguous with a rival, one loose, one failed."""
    rng = np.random.default_rng(2)
    stray = Reading(Quantity.ANGLE, 31.02, 0.6328, "TE", Place("monitor.xlsx", "angles", 13))
    remark = "fits no mode of this film; as TE2 it is +1 degrees off: a typing error?"
    sites = [site("1", readings_of(rng, 5), film(rng), x=0.0, y=0.0)]
    poor = [*readings_of(rng, 9, scatter=6.0), FittedReading(stray, None, None, 0.01, False, remark)]
    sites.append(
        site(
            "2", poor, [estimate("index", 1.9932, 0.0019, 0.0003, nm=632.8), estimate("thickness", 399.1, 1.8, 0.3)],
            flags=[flag("poor_fit", "chi-squared 39.2 for 2, factor 4.43.")],
            notes=[flag("reading_rejected", f"row 13: TE 31.02 {remark}")], x=35.0, y=0.0,
        )
    )  # fmt: skip
    rival = Rival(
        3.1, 0.16, "TE1, TE2, TM1, TM2",
        (estimate("index", 1.9712, 0.0004, 0.0003, nm=632.8), estimate("thickness", 602.2, 0.4, 0.4)),
    )  # fmt: skip
    doubt = flag("order_ambiguous", "The best one has probability 0.840.")
    sites.append(site("3", readings_of(rng, 14), film(rng), flags=[doubt], rivals=[rival], x=0.0, y=35.0))
    loose = [r for r in readings_of(rng, 18, modes=("TE0", "TM0"))]
    sites.append(
        site("4", loose, [estimate("thickness", 404.0, 2.0, 0.5, skew=0.35)], notes=[flag("not_parabolic")],
             flags=[flag("loose_direction", "Index of nitride: measure a second mode at 632.8 nm.")], x=-35.0, y=0.0)
    )  # fmt: skip
    lost = [
        FittedReading(
            Reading(Quantity.ANGLE, a, 0.6328, p, Place("monitor.xlsx", "angles", 20 + k)),
            None,
            None,
            0.01,
            False,
            "not fitted",
        )
        for k, (a, p) in enumerate([(71.3, "TE"), (70.2, "TM")])
    ]
    why = "As stated, the readings mean effective indices from 2.4712 to 2.4760."
    sites.append(site("5", lost, [], flags=[flag("no_mode_possible", why)], fitted=False, x=0.0, y=-35.0))
    pulled = flag("shared_out_of_prior", "table zero: stated 0 with u 0.01, came out 0.047.")
    skipped = ((Place("monitor.xlsx", "angles", 30, "angle_deg"), "text in place of a number: 'n/a'"),)
    return result(sites, shared=shared_of(zero=0.047), shared_flags=(pulled,), skipped_rows=skipped)


def big(wafer_count=25, rows=7):
    """25 wafers of 49 sites (1,225), two wavelengths, some flagged, some failed."""
    rng = np.random.default_rng(3)
    sites, row = [], 5
    for w in range(wafer_count):
        for k in range(rows * rows):
            x, y = 14.0 * (k % rows - rows // 2), 14.0 * (k // rows - rows // 2)
            place = {"lot": "HF-0413", "wafer": f"W{w + 1:02d}", "site": str(k + 1)}
            readings = readings_of(rng, row, nm=(632.8, 1550.0), place=place)
            row += len(readings)
            draw = rng.random()
            numbers = film(rng, thickness=590 - 0.0006 * (x * x + y * y) + 0.2 * w, nm=(632.8, 1550.0))
            flags = ()
            if draw < 0.02:
                flags = (flag("poor_fit", "chi-squared 41.0 for 5, factor 2.86."),)
            elif draw < 0.025:
                flags, numbers = (flag("no_mode_possible", "As stated, they mean 2.47 to 2.48."),), []
                readings = [FittedReading(r.reading, None, None, r.u, False, "not fitted") for r in readings]
            made = site(str(k + 1), readings, numbers, wafer=f"W{w + 1:02d}", lot="HF-0413", flags=flags, x=x, y=y)
            sites.append(made)
    return result(sites, title="Nitride on fused silica, 25 wafers (invented)")


def bare():
    """One site; the sheet names no lot, wafer, site or position."""
    rng = np.random.default_rng(4)
    return result(
        [site(None, readings_of(rng, 2), film(rng), lot=None, wafer=None)], means=(), title="One film (invented)"
    )


def two_wavelengths():
    """Three wafers without a lot, one site each, indices at two wavelengths, effective indices in place of angles."""
    rng = np.random.default_rng(5)
    sites = []
    modes = [(1.91, 632.8, "TE", 0), (1.71, 632.8, "TE", 1), (1.9, 632.8, "TM", 0), (1.82, 1550.0, "TE", 0)]
    for w in ("A", "B", "C"):
        readings = []
        for k, (n, nm, pol, m) in enumerate([*modes, (1.79, 1550.0, "TM", 0)]):
            value = round(n + 1e-4 * rng.standard_normal(), 6)
            place = Place("n.csv", None, 2 + k)
            read = Reading(Quantity.EFFECTIVE_INDEX, value, nm / 1000, pol, place, order=m, wafer=w)
            readings.append(FittedReading(read, m, n, 1e-4, True))
        sites.append(site(None, readings, film(rng, nm=(632.8, 1550.0)), lot=None, wafer=w))
    return result(sites, shared=(), title="Two wavelengths (invented)")


def uniaxial():
    """A thick polymer with two indices, on an oxide of stated thickness; notes, no flags."""
    rng = np.random.default_rng(6)
    sites = []
    for k in range(3):
        numbers = [
            estimate("index", 1.5432 + 1e-5 * k, 0.00006, 0.00014, layer="polymer", nm=632.8, axis="in_plane"),
            estimate("index", 1.5377, 0.00009, 0.00015, layer="polymer", nm=632.8, axis="normal"),
            estimate("thickness", 5210.3 + k, 4.1, 3.0, layer="polymer", skew=0.1),
            estimate("thickness", 2000.0, 0.0, 20.0, layer="oxide", origin="known", prior=(2000.0, 20.0)),
        ]
        readings = readings_of(rng, 5 + 6 * k, modes=("TE0", "TE1", "TE2", "TM0", "TM1", "TM2"))
        sites.append(site(f"S{k}", readings, numbers, notes=[flag("not_parabolic"), flag("orders_found")]))
    return result(sites, title="Uniaxial polymer (invented)")


def interrupted():
    """The run was stopped: one site done, one not."""
    rng = np.random.default_rng(7)
    idle = [FittedReading(r.reading, r.order, None, r.u, False, "not fitted") for r in readings_of(rng, 9)]
    sites = [site("1", readings_of(rng, 5), film(rng)), site("2", idle, [], flags=[flag("interrupted")], fitted=False)]
    return result(sites, interrupted=True)


ALL = {f.__name__: f for f in (good, bad, bare, two_wavelengths, uniaxial, interrupted)}
