"""Stack files with guides for the tests, all invented: a strip on buffered silicon, and ribs of three layers."""

from __future__ import annotations

STRIP = """\
title = "Strip on oxide (invented)"
reference_temperature_C = 25.0

[[layer]]
name = "wafer"
index = "silicon (Li 1980)"

[[layer]]
name = "oxide"
index = "fused silica"
thickness_nm = 2000

[[layer]]
name = "core"
index = "silicon (Li 1980)"
thickness_nm = { value = 220, u = 1 }

[[layer]]
name = "cover"
index = "fused silica"

[guide]
core = "core"
etch_depth_nm = "full"
width_bias_nm = { fit = [-60, 60], start = 5 }
sidewall_deg = 90.0

[[structure]]
name = "R20"
kind = "ring"
radius_um = 20.0
drawn_width_nm = 450
pol = "TE"

[[structure]]
name = "M38"
kind = "mzi"
delta_length_um = 38.0
drawn_width_nm = 420
pol = "TE"
"""


def rib(
    n: tuple[float, float, float],
    height_nm: float,
    etch_nm: float | str,
    width_nm: float,
    pol: str = "TE",
    path: str = "kind = 'ring'\nlength_um = 500.0",
) -> str:
    """A stack of one film with one guide: indices from the substrate up, film thickness, etch depth, width made."""
    etch = '"full"' if etch_nm == "full" else repr(etch_nm)
    return (
        f"[[layer]]\nname = 'substrate'\nindex = {n[0]!r}\n"
        f"[[layer]]\nname = 'film'\nindex = {n[1]!r}\nthickness_nm = {height_nm!r}\n"
        f"[[layer]]\nname = 'cover'\nindex = {n[2]!r}\n"
        f"[guide]\ncore = 'film'\netch_depth_nm = {etch}\n"
        f"[[structure]]\nname = 'G'\n{path}\ndrawn_width_nm = {width_nm!r}\npol = '{pol}'\n"
    )
