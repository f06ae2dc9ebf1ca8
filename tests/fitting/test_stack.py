"""Stack files: what they become inside, what is refused and in which words, and conversion between air and vacuum."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from layerlot.fitting.records import InputRefused
from layerlot.fitting.stack import Quantity, conventions, load_stack, parse_stack
from layerlot.solver.air import air_index

from tests.fitting.stack_cases import CASES, COVER, GOOD, edited


def refusal(text: str) -> list[str]:
    with pytest.raises(InputRefused) as caught:
        parse_stack(text, "wafer.toml")
    return [str(f) for f in caught.value.faults]


@pytest.mark.parametrize("name", CASES)
def test_one_fault_is_refused_in_its_own_words(name: str) -> None:
    """Each fault is refused with its place, what it was, what is required and what to do, and nothing else."""
    assert refusal(edited(name)) == [f"wafer.toml: {CASES[name][2]}"]


def test_all_faults_come_at_once() -> None:
    """A file with many faults is refused once, with every one of them."""
    names = [
        "misspelt key", "window upside down", "material misspelt", "half-space with thickness", "negative u",
        "no angle uncertainty", "guide of no layer", "interferometer without length", "polarisation",
    ]  # fmt: skip
    text = GOOD
    for name in names:
        old, new, _ = CASES[name]
        text = text.replace(old, new)
    assert sorted(refusal(text)) == sorted(f"wafer.toml: {CASES[name][2]}" for name in names)


def test_quantities_in_micrometres() -> None:
    """Numbers, known and fitted quantities arrive as typed, lengths in µm, `value` beside `fit` as its start."""
    text = GOOD.replace("{ fit = [300, 700] }", "{ fit = [300, 700], value = 500 }")
    stack = parse_stack(text, "wafer.toml")
    film = stack.layers[1]
    assert film.thickness_um == Quantity("fit", low=0.3, high=0.7, start=0.5)
    assert film.index.quantity == Quantity("fit", low=1.9, high=2.05)
    assert stack.layers[2].index.quantity == Quantity("exact", value=1.0)
    assert [layer.thickness_um is None for layer in stack.layers] == [True, False, True]
    assert stack.prism is not None and stack.prism.one_index
    assert stack.prism.index_TE.quantity == Quantity("known", value=2.1745, u=0.0002)
    assert stack.prism.base_angle_deg == Quantity("exact", value=60.0)
    assert (stack.prism.angle_u_deg, stack.prism.angle_sign) == (0.01, 1)


def test_guide_and_structures() -> None:
    """[guide] and [[structure]] are read: a full etch has no depth, widths and biases are in µm."""
    stack = parse_stack(GOOD, "wafer.toml")
    assert stack.guide is not None and stack.guide.etch_depth_um is None
    assert stack.guide.width_bias_um == Quantity("fit", low=-0.06, high=0.06)
    ring, mzi = stack.structures
    assert (ring.kind, ring.radius_um, ring.drawn_width_um) == ("ring", Quantity("exact", value=20.0), 0.45)
    assert (mzi.kind, mzi.delta_length_um, mzi.pol) == ("mzi", Quantity("exact", value=38.0), "TE")


def test_minimal_file() -> None:
    """Three layers are a stack; prism, guide, title and temperature may be absent."""
    text = "".join(
        f'[[layer]]\nname = "{n}"\nindex = {i}\n{t}\n'
        for n, i, t in (("a", 1.45, ""), ("b", 2.0, "thickness_nm = 400"), ("c", 1, ""))
    )
    stack = parse_stack(text, "x.toml")
    assert (stack.prism, stack.guide, stack.structures, stack.reference_temperature_C) == (None, None, (), None)
    assert stack.layers[2].index.quantity == Quantity("exact", value=1.0)


# What is typed, its index at 800 nm written out by hand.
CURVES = {
    "{ sellmeier_B = [1.1], sellmeier_C_um = [0.1] }": np.sqrt(1 + 1.1 * 0.64 / (0.64 - 0.01)),
    "{ cauchy = [1.45, 0.0035, 1e-4] }": 1.45 + 0.0035 / 0.64 + 1e-4 / 0.64**2,
    "{ table = [[600, 1.5], [1000, 1.4]] }": 1.45,
    "{ table = [[600, 1.5], [1000, 1.4]], shift = { value = 0.01, u = 0.001 } }": 1.45,  # the shift is apart
}


@pytest.mark.parametrize("typed", CURVES)
def test_curves_become_materials(typed: str) -> None:
    """Every way to give a dispersive index becomes a material with that index."""
    stack = parse_stack(GOOD.replace(COVER, f"index = {typed}"), "wafer.toml")
    spec = stack.layers[2].index
    # A handful of operations in double precision.
    assert spec.index_inside(stack, 0.8) == pytest.approx(CURVES[typed], rel=1e-14)
    assert spec.shift == (Quantity("known", value=0.01, u=0.001) if "shift" in typed else None)
    slope = (spec.index_inside(stack, 0.8001) - spec.index_inside(stack, 0.7999)) / 2e-4
    assert spec.dn_dwavelength(stack, 0.8) == pytest.approx(float(slope), rel=1e-5)  # curvature of 1e-4 µm


def test_catalogue_entry_with_a_shift() -> None:
    """A catalogue material may carry a shift."""
    spec = (
        parse_stack(
            GOOD.replace('"fused silica"', '{ material = "Fused Silica", shift = { fit = [-0.01, 0.01] } }'), "x"
        )
        .layers[0]
        .index
    )
    assert (spec.name, spec.shift) == ("fused silica", Quantity("fit", low=-0.01, high=0.01))


@pytest.mark.parametrize(("near", "expected"), [("2.0", 2.0), ('"N-SF11"', "N-SF11")])
def test_fitted_curve_knows_what_it_is_near(near: str, expected: float | str) -> None:
    """A fitted Cauchy curve carries its terms and the number or material that it lies near."""
    text = GOOD.replace("index = { fit = [1.90, 2.05] }", f"index = {{ fit_cauchy = 3, near = {near} }}")
    spec = parse_stack(text, "x").layers[1].index
    assert (spec.kind, spec.cauchy_terms) == ("fit_cauchy", 3)
    assert (spec.near if isinstance(spec.near, float) else getattr(spec.near, "name", None)) == expected


def test_birefringent_prism_and_uniaxial_layer() -> None:
    """A prism may have an index for each polarisation, a layer one along the normal."""
    text = GOOD.replace("index = { value = 2.1745, u = 0.0002 }", "index_TE = 2.58\nindex_TM = 2.87")
    text = text.replace("index = { fit = [1.90, 2.05] }", "index = 1.6\nindex_normal = 1.59")
    stack = parse_stack(text, "x")
    assert stack.prism is not None and not stack.prism.one_index
    assert stack.prism.index_TM.quantity == Quantity("exact", value=2.87)
    normal = stack.layers[1].index_normal
    assert normal is not None and normal.quantity == Quantity("exact", value=1.59)


def in_air(which: str) -> str:
    return f'{which} = "air"\n{GOOD}'


def test_typed_wavelengths_in_air() -> None:
    """With wavelength_reference = "air", 632.8 nm typed is 632.971 nm in vacuum.

    Refractivity 27653e-8 of standard air at 15 °C (Ciddor 1996, from memory), thinned as an ideal gas to 22 °C.
    """
    stack = parse_stack(in_air("wavelength_reference"), "x")
    assert stack.to_vacuum_um(0.6328) == pytest.approx(
        0.6328 * (1 + 27653e-8 * 288.15 / 295.15), abs=2e-8
    )  # 1e-4 of the step: non-ideality
    assert parse_stack(GOOD, "x").to_vacuum_um(0.6328) == 0.6328


def test_typed_indices_in_air() -> None:
    """With index_reference = "air", typed and absolute indices differ by the factor of air, both ways."""
    stack = parse_stack(in_air("index_reference"), "x")
    inside = stack.index_inside([1.0, 1.5], 0.6328)
    np.testing.assert_allclose(inside, np.array([1.0, 1.5]) * air_index(0.6328, 22.0), rtol=1e-15)
    np.testing.assert_allclose(stack.index_typed(inside, 0.6328), [1.0, 1.5], rtol=1e-15)
    assert parse_stack(GOOD, "x").index_inside(1.5, 0.6328) == 1.5


def test_typed_curves_share_the_reference() -> None:
    """A table typed in air terms returns its own number at its own wavelength, whatever the way through vacuum."""
    text = 'index_reference = "air"\n' + in_air("wavelength_reference")
    text = text.replace(COVER, "index = { table = [[632.8, 1.5], [1550, 1.48]] }")
    stack = parse_stack(text, "x")
    for typed_um, n in ((0.6328, 1.5), (1.55, 1.48)):
        vacuum = stack.to_vacuum_um(typed_um)
        inside = stack.layers[2].index.index_inside(stack, vacuum)
        # Two conversions of 3e-4, each exact to rounding.
        assert stack.index_typed(inside, vacuum) == pytest.approx(n, rel=1e-14)


def test_reference_temperature_reaches_the_material() -> None:
    """A reading without temperature is taken at the stack's; one with its own, at its own."""
    stack = parse_stack(GOOD, "x")
    silica = stack.layers[0].index
    at = [float(silica.index_inside(stack, 0.6328, t)) for t in (None, 22.0, 32.0)]
    assert at[0] == at[1]
    assert at[2] - at[1] == pytest.approx(10 * 1.0e-5, rel=1e-6)  # the catalogue's dn/dT


def test_conventions_name_reference_and_source() -> None:
    """The sentences for the report name both references, the temperature and each material's source."""
    sentences = conventions(parse_stack(in_air("index_reference"), "x"))
    assert sentences[:4] == (
        "Wavelengths as typed are wavelengths in vacuum.",
        "Indices as typed and as reported are relative to dry air at 22 °C and 101325 Pa.",
        "Coupling angles are taken in that same medium: its index at the entrance face counts as 1.",
        "Readings without a temperature of their own are taken at 22 °C.",
    )
    assert len(sentences) == 5
    assert sentences[4].startswith("Index of substrate: fused silica, I. H. Malitson, J. Opt. Soc. Am. 55, 1205 (1965)")
    assert sentences[4].endswith("Table 1.")


def test_file_is_read_with_a_byte_order_mark(tmp_path: Path) -> None:
    """A file saved with a byte-order mark and Windows line ends is read."""
    path = tmp_path / "wafer.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert load_stack(path).title == "Nitride core on oxide (invented)"


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (None, "no such file, a stack file is required, check the path"),
        (
            b'# \xb5m\ntitle = "x"',
            "a byte that is not UTF-8 in line 1, stack files are plain text in UTF-8, save it as",
        ),
        (b"", "column layer: missing, layer is required, start each layer with [[layer]], from the substrate up"),
        (b"PK\x03\x04\xff\xfe", "a byte that is not UTF-8 in line 1"),
    ],
)
def test_unreadable_files(tmp_path: Path, content: bytes | None, message: str) -> None:
    """A missing, foreign or empty file is refused with its path."""
    path = tmp_path / "wafer.toml"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputRefused) as caught:
        load_stack(path)
    assert str(caught.value).startswith(f"{path}: {message}")


def test_folder_for_a_file(tmp_path: Path) -> None:
    """A folder in place of a stack file is refused."""
    with pytest.raises(InputRefused, match="a folder, a stack file is required, name the file itself"):
        load_stack(tmp_path)
