"""A good stack file (invented) and one fault after another: what was typed, and the line that must come back."""

from __future__ import annotations

GOOD = """\
title = "Nitride core on oxide (invented)"
reference_temperature_C = 22.0

[[layer]]
name = "substrate"
index = "fused silica"

[[layer]]
name = "core"
index = { fit = [1.90, 2.05] }
thickness_nm = { fit = [300, 700] }

[[layer]]
name = "cover"
index = 1.0

[prism]
index = { value = 2.1745, u = 0.0002 }
base_angle_deg = 60.0
angle_offset_deg = { value = 0.0, u = 0.01 }
angle_u_deg = 0.01

[guide]
core = "core"
etch_depth_nm = "full"
width_bias_nm = { fit = [-60, 60] }
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

CORE = "index = { fit = [1.90, 2.05] }"
THICK = "thickness_nm = { fit = [300, 700] }"
COVER = "index = 1.0"
PRISM = "index = { value = 2.1745, u = 0.0002 }"
BASE = "base_angle_deg = 60.0"

# what is wrong: (old text, new text, the message after "wafer.toml: ")
CASES: dict[str, tuple[str, str, str]] = {
    "decimal comma": (
        BASE,
        "base_angle_deg = 60,0",
        "row 19: base_angle_deg = 60,0 (expected newline or end of document after a statement), the line "
        "is no valid TOML, write decimal points, not commas",
    ),
    "bracket left open": (
        THICK,
        "thickness_nm = { fit = [300, 700 }",
        "row 11: thickness_nm = { fit = [300, 700 } (unclosed array), the line is no valid TOML, correct "
        "this line: texts in double quotes, decimal points, every bracket closed",
    ),
    "quote left open": (
        'name = "core"',
        'name = "core',
        "row 9: name = \"core (illegal character '\\n'), the line is no valid TOML, correct this line: texts "
        "in double quotes, decimal points, every bracket closed",
    ),
    "key twice": (
        COVER,
        "index = 1.0\nindex = 1.1",
        "row 16: index = 1.1 (cannot overwrite a value), the line is no valid TOML, give each key once in a section",
    ),
    "single brackets": (
        '[[structure]]\nname = "R20"',
        '[structures]\nname = "R20"',
        "column structures: unknown key structures, only known keys are read, did you mean structure?",
    ),
    "misspelt key": (
        THICK,
        "thicknes_nm = { fit = [300, 700] }",
        "column layer[2].thicknes_nm: unknown key thicknes_nm, only known keys are read, did you mean thickness_nm?",
    ),
    "key in another unit": (
        THICK,
        "thickness_um = { fit = [0.3, 0.7] }",
        "column layer[2].thickness_um: unknown key thickness_um, only known keys are read, write thickness_nm, in nm",
    ),
    "misspelt section": (
        "[prism]",
        "[prizm]",
        "column prizm: unknown key prizm, only known keys are read, did you mean prism?",
    ),
    "unknown key": (
        COVER,
        "index = 1.0\ncolour = 3",
        "column layer[3].colour: unknown key colour, only known keys are read, remove it; known are name, "
        "index, index_normal, thickness_nm",
    ),
    "misspelt key of a quantity": (
        THICK,
        "thickness_nm = { fitt = [300, 700] }",
        "column layer[2].thickness_nm.fitt: unknown key fitt, only known keys are read, did you mean fit?",
    ),
    "unknown material": (
        COVER,
        'index = "unobtainium"',
        'column layer[3].index: "unobtainium", the name of a material in the catalogue is required, known '
        "are: N-BK7; N-SF11; N-SF6; SF6; air; fused silica; gadolinium gallium garnet; gallium arsenide; "
        "lithium niobate, extraordinary; lithium niobate, ordinary; rutile, extraordinary; rutile, "
        "ordinary; sapphire, extraordinary; sapphire, ordinary; silicon (Green 2008); silicon (Li 1980); "
        "silicon (Salzberg and Villa 1957); silicon nitride (Luke 2015); silicon nitride (Philipp 1973)",
    ),
    "material by half its name": (
        COVER,
        'index = "silicon"',
        'column layer[3].index: "silicon", the name of a material in the catalogue is required, did you '
        "mean silicon (Salzberg and Villa 1957) or silicon (Li 1980) or silicon (Green 2008) or silicon "
        "nitride (Philipp 1973) or silicon nitride (Luke 2015)?",
    ),
    "material misspelt": (
        '"fused silica"',
        '"fused silca"',
        'column layer[1].index: "fused silca", the name of a material in the catalogue is required, did '
        "you mean fused silica?",
    ),
    "number in quotes": (
        COVER,
        'index = "1,0"',
        'column layer[3].index: "1,0", a number is typed without quotes, write 1.0',
    ),
    "truth value for a number": (
        COVER,
        "index = true",
        "column layer[3].index: true, a quantity, a catalogue name or a dispersion curve is required, "
        "write a number, { value, u }, { fit = [low, high] }, a name in quotes, or { table = [[nm, n], "
        "...] }",
    ),
    "window upside down": (
        CORE,
        "index = { fit = [2.05, 1.90] }",
        "column layer[2].index.fit: [2.05, 1.9], the window must rise, write fit = [1.9, 2.05] with low below high",
    ),
    "window of three": (
        CORE,
        "index = { fit = [1.9, 2.0, 2.1] }",
        "column layer[2].index.fit: [1.9, 2, 2.1], a fit window has two numbers, write fit = [low, high]",
    ),
    "window of texts": (
        CORE,
        'index = { fit = ["1.9", 2.0] }',
        'column layer[2].index.fit[1]: "1.9", a number is required, write it without quotes, with a decimal point',
    ),
    "start outside": (
        CORE,
        "index = { fit = [1.90, 2.05], start = 2.2 }",
        "column layer[2].index: start 2.2, the start lies inside the window 1.9 to 2.05, widen the window "
        "or move the start",
    ),
    "two starts": (
        CORE,
        "index = { fit = [1.90, 2.05], start = 2.0, value = 1.95 }",
        "column layer[2].index: start = 2 and value = 1.95, one start value, keep start alone",
    ),
    "fit with u": (
        CORE,
        "index = { fit = [1.90, 2.05], u = 0.01 }",
        "column layer[2].index.u: u = 0.01, a fitted quantity has no u of its own, write { value, u } for "
        "a known quantity, { fit = [low, high] } for an unknown one",
    ),
    "known without u": (
        PRISM,
        "index = { value = 2.1745 }",
        "column prism.index.u: missing, u is required, add u, the standard uncertainty, or write the "
        "number alone if it is exact",
    ),
    "u without value": (
        PRISM,
        "index = { u = 0.0002 }",
        "column prism.index.value: missing, value is required, add value",
    ),
    "negative u": (
        PRISM,
        "index = { value = 2.1745, u = -0.0002 }",
        "column prism.index.u: -0.0002, a number >= 0 is required, correct the number",
    ),
    "infinite value": (
        PRISM,
        "index = { value = inf, u = 0.1 }",
        "column prism.index.value: inf, a finite number is required, correct the number",
    ),
    "index far off": (
        CORE,
        "index = { fit = [190, 205] }",
        "column layer[2].index: 190, a refractive index lies between 0.01 and 10, correct the index",
    ),
    "thickness negative": (
        THICK,
        "thickness_nm = { fit = [-300, 700] }",
        "column layer[2].thickness_nm: -300, a thickness in nm lies between 0 and 1000000, write the thickness in nm",
    ),
    "thickness in micrometres": (
        THICK,
        "thickness_nm = { fit = [0.3, 0.7] }",
        "column layer[2].thickness_nm: { fit = [0.3, 0.7] }, thicknesses are in nm, and no film is thinner "
        "than 1 nm, if µm was meant, write 300 to 700",
    ),
    "half-space with thickness": (
        COVER,
        "index = 1.0\nthickness_nm = 1000",
        "column layer[3].thickness_nm: 1000, the last layer is a half-space and has no thickness, remove "
        "it, or add the layer beyond",
    ),
    "film without thickness": (
        THICK,
        "",
        "column layer[2].thickness_nm: missing, every layer between the half-spaces has a thickness, add "
        "thickness_nm = a number, { value, u } or { fit = [low, high] }",
    ),
    "film name twice": (
        'name = "cover"',
        'name = "core"',
        'column layer[3].name: "core", the name of layer[2] too, each layer has its own name, rename one of them',
    ),
    "no index": (
        COVER,
        "",
        "column layer[3].index: missing, index is required, add index = a number, a catalogue name in "
        "quotes, or { fit = [low, high] }",
    ),
    "no base angle": (
        BASE,
        "",
        "column prism.base_angle_deg: missing, base_angle_deg is required, add base_angle_deg, the angle "
        "between entrance face and base",
    ),
    "base angle of no prism": (
        BASE,
        "base_angle_deg = 120.0",
        "column prism.base_angle_deg: 120, a base angle lies between 0 and 90, write the angle in degrees",
    ),
    "no angle uncertainty": (
        "angle_u_deg = 0.01",
        "angle_u_deg = 0",
        "column prism.angle_u_deg: 0, a number > 0 is required, correct the number",
    ),
    "angle sign": (
        "angle_u_deg = 0.01",
        "angle_u_deg = 0.01\nangle_sign = 0",
        "column prism.angle_sign: 0, 1 or -1 is required, write one of these",
    ),
    "prism without index": (
        PRISM,
        "",
        "column prism.index: no index, the prism's index is required, add index, or index_TE with index_TM",
    ),
    "prism with one polarisation": (
        PRISM,
        "index_TE = 2.17",
        "column prism.index: index_TE alone, the prism's index is required, add index, or index_TE with index_TM",
    ),
    "prism with three indices": (
        PRISM,
        "index = 2.17\nindex_TE = 2.17\nindex_TM = 2.17",
        "column prism: index beside index_TE and index_TM, one index, or one for each polarisation, keep "
        "index, or index_TE with index_TM",
    ),
    "table unsorted": (
        COVER,
        "index = { table = [[1550, 1.44], [632.8, 1.457]] }",
        "column layer[3].index.table: 632.8 nm after 1550 nm, wavelengths rise from row to row, sort, drop "
        "repeated rows",
    ),
    "table in micrometres": (
        COVER,
        "index = { table = [[0.6328, 1.457], [1.55, 1.444]] }",
        "column layer[3].index.table: row 1: wavelength 0.6328 nm, wavelengths are in nm, 100 to 50000, if "
        "µm was meant, write 632.8",
    ),
    "table of one row": (
        COVER,
        "index = { table = [[632.8, 1.457]] }",
        "column layer[3].index.table: 1 row, a table has two rows or more, for one wavelength write the "
        "index as a number",
    ),
    "table columns swapped": (
        COVER,
        "index = { table = [[1.457, 632.8], [1.444, 1550]] }",
        "column layer[3].index.table: row 1: [1.457, 632.8], a row is [wavelength_nm, n], swap the two columns",
    ),
    "table row short": (
        COVER,
        "index = { table = [[632.8], [1550, 1.44]] }",
        "column layer[3].index.table: row 1 has 1 values, a row is [wavelength_nm, n], write two numbers a row",
    ),
    "Sellmeier uneven": (
        COVER,
        "index = { sellmeier_B = [0.7, 0.4], sellmeier_C_um = [0.07] }",
        "column layer[3].index: 2 B and 1 C, as many sellmeier_C_um as sellmeier_B are required, give one C for each B",
    ),
    "Cauchy of five": (
        COVER,
        "index = { cauchy = [1, 2, 3, 4, 5] }",
        "column layer[3].index.cauchy: [1, 2, 3, 4, 5], at most 4 numbers are required, correct the list",
    ),
    "curve of four terms": (
        CORE,
        "index = { fit_cauchy = 4, near = 2.0 }",
        "column layer[2].index.fit_cauchy: 4, 2 or 3 is required, write one of these",
    ),
    "curve near nothing": (
        CORE,
        "index = { fit_cauchy = 2 }",
        "column layer[2].index.near: missing, near is required, add near = a number or a catalogue name "
        "that the curve lies near",
    ),
    "reference": (
        "reference_temperature_C = 22.0",
        'index_reference = "helium"',
        'column index_reference: "helium", "vacuum" or "air" is required, write one of these',
    ),
    "temperature in kelvin": (
        "reference_temperature_C = 22.0",
        "reference_temperature_C = 295",
        "column reference_temperature_C: 295, a number <= 100 is required, write degrees Celsius",
    ),
    "guide of no layer": (
        'core = "core"',
        'core = "cor"',
        'column guide.core: "cor", the name of a layer between the half-spaces is required, did you mean "core"?',
    ),
    "ring with path difference": (
        "radius_um = 20.0",
        "delta_length_um = 20.0",
        "column structure[1]: delta_length_um, a ring has radius_um, or length_um for any closed path, "
        "give that one alone",
    ),
    "interferometer without length": (
        "delta_length_um = 38.0",
        "",
        "column structure[2]: no length, an interferometer has delta_length_um, give that one alone",
    ),
    "structure kind": (
        'kind = "ring"',
        'kind = "disc"',
        'column structure[1].kind: "disc", "ring" or "mzi" is required, write one of these',
    ),
    "structures without guide": (
        GOOD[GOOD.index("[guide]") : GOOD.index("[[structure]]")],
        "",
        "column guide: [[structure]] without [guide], structures need to know which layer is etched, add "
        '[guide] with core = "..."',
    ),
    "polarisation": (
        'drawn_width_nm = 420\npol = "TE"',
        'drawn_width_nm = 420\npol = "te"',
        'column structure[2].pol: "te", "TE" or "TM" is required, write one of these',
    ),
}


def edited(name: str) -> str:
    """The good file with one fault."""
    old, new, _ = CASES[name]
    assert GOOD.count(old) == 1, f"{name}: {old!r} stands {GOOD.count(old)} times"
    return GOOD.replace(old, new)
