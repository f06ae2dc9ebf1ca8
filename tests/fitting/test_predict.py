"""Predictions of film modes against published and independent values."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from layerlot.fitting.cli import main

from tests.fitting.stack_cases import GOOD
from tests.reference.field_model import coupling_angle_deg, guided_modes


def stack_text(layers: list[tuple[float, float | None]], extra: str = "") -> str:
    """A stack file of (index, thickness in nm or None) from the substrate up."""
    parts = []
    for number, (n, t_nm) in enumerate(layers):
        thickness = "" if t_nm is None else f"thickness_nm = {t_nm!r}\n"
        parts.append(f'[[layer]]\nname = "{number}"\nindex = {n!r}\n{thickness}')
    return "\n".join(parts) + "\n" + extra


def predict(tmp_path: Path, capsys: pytest.CaptureFixture[str], text: str, *arguments: str) -> dict[str, Any]:
    path = tmp_path / "wafer.toml"
    path.write_text(text, encoding="utf-8")
    assert main(["predict", str(path), "--json", *arguments]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    document: dict[str, Any] = json.loads(out)
    assert set(document) == {"film_modes", "guide"}
    assert document["guide"] == []
    return document


def column(document: dict[str, Any], key: str, pol: str) -> list[float]:
    modes = [m for m in document["film_modes"] if m["pol"] == pol]
    assert [m["order"] for m in modes] == list(range(len(modes)))
    return [m[key] for m in modes]


def test_published_four_films(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Four films between glass and air have the published effective indices.

    J. Chilwell, I. Hodgkinson, J. Opt. Soc. Am. A 1, 742 (1984), from memory; TM2 and TM3 from an independent solution.
    """
    films = [(1.5, None), (1.66, 500.0), (1.6, 500.0), (1.53, 500.0), (1.66, 500.0), (1.0, None)]
    document = predict(tmp_path, capsys, stack_text(films), "--wavelength-nm", "632.8")
    # The published numbers have six decimals.
    assert column(document, "n_eff", "TE") == pytest.approx([1.622729, 1.605276, 1.557136, 1.503587], abs=6e-7)
    assert column(document, "n_eff", "TM") == pytest.approx([1.620031, 1.594788, 1.554981, 1.501818], abs=6e-7)
    assert set(column(document, "loss_dB_per_cm", "TE")) == {0.0}
    assert "angle_deg" not in document["film_modes"][0]


def test_leaky_film(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A silicon film on 0.5 µm of oxide on silicon leaks with the loss of an independent complex root search."""
    films = [(3.476, None), (1.444, 500.0), (3.476, 220.0), (1.0, None)]
    document = predict(tmp_path, capsys, stack_text(films), "--wavelength-nm", "1550")
    # Printed digits of the reference.
    assert column(document, "n_eff", "TE")[0] == pytest.approx(2.8308864477, abs=1e-9)
    assert column(document, "loss_dB_per_cm", "TE")[0] == pytest.approx(7.45098, rel=1e-5)
    assert column(document, "n_eff", "TM")[0] == pytest.approx(1.893682621, abs=1e-9)
    assert column(document, "loss_dB_per_cm", "TM")[0] == pytest.approx(966.0024, rel=1e-5)


PRISM = "[prism]\nindex = 2.8719\nbase_angle_deg = 45.0\nangle_u_deg = 0.01\n"
OXYNITRIDE = [(1.457, None), (1.52, 3000.0), (1.0, None)]


def test_coupling_angles(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """An oxynitride-like film under a rutile-like prism couples at the angles of an independent calculation.

    Relation of R. Ulrich, R. Torge, Appl. Opt. 12, 2901 (1973); values computed apart from this project.
    """
    document = predict(tmp_path, capsys, stack_text(OXYNITRIDE, PRISM), "--wavelength-nm", "632.8")
    # 1e-6 degrees: 1e-8 in effective index, the digits of the reference.
    expected = {
        "TE": [-40.66365362, -41.44203656, -42.7480844, -44.57346718],
        "TM": [-40.674633, -41.4852315, -42.84144362, -44.72124721],
    }
    for pol, angles in expected.items():
        assert column(document, "angle_deg", pol) == pytest.approx(angles, abs=1e-6)


def test_sign_and_zero_of_the_table(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """angle_sign turns the angle about, and the table's zero is added after that."""
    extra = PRISM + "angle_sign = -1\nangle_offset_deg = 0.5\n"
    document = predict(tmp_path, capsys, stack_text(OXYNITRIDE, extra), "--wavelength-nm", "632.8", "--pol", "TE")
    assert column(document, "angle_deg", "TE")[0] == pytest.approx(40.66365362 + 0.5, abs=1e-6)


def test_mode_beyond_the_prism(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A mode that the prism cannot reach has no angle in the document and a dash in the table."""
    text = stack_text([(1.457, None), (2.0, 500.0), (1.0, None)], PRISM.replace("2.8719", "1.9"))
    document = predict(tmp_path, capsys, text, "--wavelength-nm", "632.8", "--pol", "TE")
    angles = column(document, "angle_deg", "TE")
    assert angles[0] is None and angles[1] is not None
    assert main(["predict", str(tmp_path / "wafer.toml"), "--wavelength-nm", "632.8"]) == 0
    assert "angle -: the prism cannot reach the mode." in capsys.readouterr().out


def test_catalogue_shift_and_start_together(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Catalogue index, shift and start reach the mode equation: indices and angles equal those of an independent model.

    Fused silica (I. H. Malitson, J. Opt. Soc. Am. 55, 1205, 1965: 1.45701793 at 632.8 nm relative to air at 20 °C).
    """
    text = GOOD.split("[guide]")[0].replace(
        'index = "fused silica"', 'index = { material = "fused silica", shift = 0.001 }'
    )
    text = text.replace("[1.90, 2.05] }", "[1.90, 2.05], start = 2.0 }").replace(
        "[300, 700] }", "[300, 700], value = 500 }"
    )
    text = text.replace(
        "temperature_C = 22.0", "temperature_C = 20.0\nindex_reference = 'air'\nwavelength_reference = 'air'"
    )
    document = predict(tmp_path, capsys, text, "--wavelength-nm", "632.8")
    n = np.array([[1.45701793 + 0.001, 2.0, 1.0]])
    for pol in ("TE", "TM"):
        expected = guided_modes(n, np.array([[0.5]]), 0.6328, pol == "TM")[0]
        # The table's index has eight decimals; angles are a few tens of degrees per unit of index.
        assert column(document, "n_eff", pol) == pytest.approx(list(expected), abs=1e-8)
        angles = coupling_angle_deg(expected, 2.1745, 60.0)
        assert column(document, "angle_deg", pol) == pytest.approx(list(angles), abs=1e-6)


def test_sensitivities_are_derivatives(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The stated sensitivities equal differences of two predictions."""

    def at(n: float, t_nm: float) -> dict[str, Any]:
        layers = [(1.457, None), (1.48, 800.0), (n, t_nm), (1.0, None)]
        return predict(tmp_path, capsys, stack_text(layers), "--wavelength-nm", "632.8")

    middle = at(1.9, 400.0)
    pairs = {"index": (at(1.9 - 1e-4, 400.0), at(1.9 + 1e-4, 400.0), 2e-4)}
    pairs["thickness_per_nm"] = (at(1.9, 399.9), at(1.9, 400.1), 0.2)
    for key, (low, high, step) in pairs.items():
        for m, a, b in zip(middle["film_modes"], low["film_modes"], high["film_modes"], strict=True):
            # Steps of 1e-4: curvature terms of 1e-7 relative or so.
            assert m["sensitivity"]["2"][key] == pytest.approx((b["n_eff"] - a["n_eff"]) / step, rel=1e-5)


def test_wavelengths_in_a_row_or_repeated(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Several wavelengths may follow one option or each its own, in any order with the file."""
    text = stack_text(OXYNITRIDE)
    many = predict(tmp_path, capsys, text, "--wavelength-nm", "632.8", "1550", "--pol", "TE")
    again = predict(tmp_path, capsys, text, "--wavelength-nm", "632.8", "--wavelength-nm", "1550", "--pol", "TE")
    assert many == again
    assert list(dict.fromkeys(m["wavelength_nm"] for m in many["film_modes"])) == [632.8, 1550.0]
    assert main(["predict", "--json", "--wavelength-nm", "632.8", "1550", str(tmp_path / "wafer.toml")]) == 0
    assert len(json.loads(capsys.readouterr().out)["film_modes"]) > len(many["film_modes"])


def test_wavelengths_of_the_tables_by_default(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without a wavelength, those of the file's own tables are taken, and the text says so."""
    text = stack_text(OXYNITRIDE).replace("index = 1.52", "index = { table = [[632.8, 1.52], [850, 1.51]] }")
    document = predict(tmp_path, capsys, text)
    assert {m["wavelength_nm"] for m in document["film_modes"]} == {632.8, 850.0}
    assert main(["predict", str(tmp_path / "wafer.toml")]) == 0
    assert "No wavelength was asked for: 632.8, 850 nm taken." in capsys.readouterr().out


def test_missing_starts_are_all_named(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Every fitted quantity without a start is named, together with a wavelength that a material does not cover."""
    path = tmp_path / "wafer.toml"
    text = GOOD.replace("base_angle_deg = 60.0", "base_angle_deg = { fit = [59, 61] }")
    path.write_text(text, encoding="utf-8")
    assert main(["predict", str(path), "--wavelength-nm", "632.8", "190", "0.6"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    told = ", a prediction needs a value, add start = ... beside fit"
    assert err.splitlines() == [
        f"{path}: column layer[2].index: to be fitted, without a start{told}",
        f"{path}: column layer[2].thickness_nm: to be fitted, without a start{told}",
        f"{path}: column prism.base_angle_deg: to be fitted, without a start{told}",
        f"{path}: column guide.width_bias_nm: to be fitted, without a start{told}",
        "command line: column --wavelength-nm: 190 nm, air is known for wavelengths from 230 nm, not at 190 nm, "
        "ask for another wavelength, or give that index as a number or a table",
        "command line: column --wavelength-nm: 0.6 nm, wavelengths are in nm, 100 to 50000, if µm was meant, write 600",
    ]


def test_no_mode_is_said(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A film too thin to guide gives an empty list and a sentence, not an error."""
    text = stack_text([(1.457, None), (1.5, 20.0), (1.0, None)], PRISM)
    assert predict(tmp_path, capsys, text, "--wavelength-nm", "632.8")["film_modes"] == []
    assert main(["predict", str(tmp_path / "wafer.toml"), "--wavelength-nm", "632.8"]) == 0
    assert "No mode at 632.8 nm: the film is too thin, or its index too low." in capsys.readouterr().out


def test_text_states_reference_and_caution(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The text ends with what numbers are relative to, and reminds of laser safety where angles are given."""
    predict(tmp_path, capsys, stack_text(OXYNITRIDE, PRISM))
    assert main(["predict", str(tmp_path / "wafer.toml")]) == 0
    out = capsys.readouterr().out
    assert "Laser light at the prism: follow local laser-safety rules and licensed practice." in out
    assert "Indices as typed and as reported are relative to vacuum." in out
