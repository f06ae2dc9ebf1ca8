"""The words that head the columns of prism-coupler tables, in the spellings and languages met most.

Spellings stand here as `normal()` leaves them: lower case, without accents, punctuation as single blanks.
"""

from __future__ import annotations

import re
import unicodedata

MEANINGS: dict[str, str] = {
    "lot": "lot|batch|los|charge|fertigungslos|losnummer|lote|lotto|partij|lotid|batchid|ロット|批次|批号",
    "wafer": "wafer|sample|monitor|monitor wafer|waferid|wafernummer|scheibe|plaque|tranche|plaquette|oblea"
    "|fetta|muestra|echantillon|campione|ウェハ|ウエハ|ウェーハ|晶圆|晶片",
    "site": "site|point|pt|meas point|meas pt|measurement point|measurement site|location|loc|spot|position"
    "|pos|die|siteid|messpunkt|punkt|messstelle|stelle|messort|sitio|punto|sito|posizione|posicion"
    "|emplacement|point de mesure|plek|サイト|測定点|位置|测点|测量点",
    "x_mm": "x|x pos|position x|pos x|x position|x coordinate|x coord|xpos|wafer x|die x|x koordinate",
    "y_mm": "y|y pos|position y|pos y|y position|y coordinate|y coord|ypos|wafer y|die y|y koordinate",
    "measured_at": "measured at|measured on|date|datetime|timestamp|date time|measurement date|measurement time"
    "|datum|zeitpunkt|messdatum|messzeit|fecha|date de mesure|data misura|日付|日期|測定日|测量日期",
    "clock": "time|uhrzeit|heure|hora|zeit|時刻|时间",
    "temperature_C": "temperature|temp|room temperature|wafer temperature|temperatur|raumtemperatur|temperatura|温度",
    "tool": "tool|instrument|equipment|machine|station|coupler|prism coupler|gerat|geraet|messgerat"
    "|messgeraet|anlage|appareil|equipo|strumento|装置|设备",
    "wavelength": "wavelength|wave length|lambda|λ|λ0|lambda0|wl|laser|laser line|laser wavelength"
    "|vacuum wavelength|wavelength vacuum|wellenlange|wellenlaenge|laserwellenlange|vakuumwellenlange"
    "|longueur d onde|longueur onde|longitud de onda|lunghezza d onda|lunghezza onda"
    "|comprimento de onda|golflengte|vaglangd|波長|波长",
    "pol": "pol|polarisation|polarization|polarisierung|polarizacion|polarizzazione|polarisatie|polarizacao"
    "|te tm|te or tm|s p|偏光|偏振|偏波",
    "mode": "mode|modes|m|order|mode order|mode number|mode label|modus|modenummer|mode nummer|ordnung"
    "|modenordnung|moden|ordre|ordre du mode|modo|orden|ordine|ordem|numero de mode|モード|モード次数"
    "|模式|次数|模",
    "angle": "angle|theta|θ|θm|ext angle|coupling angle|synchronous angle|external angle|angle external|incidence angle"
    "|incident angle|angle of incidence|measured angle|dip angle|mode angle|table angle"
    "|rotation angle|theta ext|θ ext|theta m|θ m|angle θ|angle theta|coupling angle θ|winkel|winkel θ"
    "|einkoppelwinkel|koppelwinkel|kopplungswinkel|einfallswinkel|messwinkel|angle de couplage"
    "|angle d incidence|angulo|angulo de acoplamiento|angulo de acoplamento|angolo"
    "|angolo di accoppiamento|hoek|inkoppelhoek|角度|結合角|耦合角|入射角",
    "effective_index": "effective index|eff index|neff|n eff|effective index n|effective refractive index|β k0|beta k0"
    "|β k|beta k|effektiver index|effektiver brechungsindex|effektive brechzahl|effektivindex"
    "|indice effectif|indice efectivo|indice efficace|indice effettivo|effectieve index|実効屈折率"
    "|等価屈折率|有效折射率",
    "u": "u|uncertainty|standard uncertainty|std uncertainty|u angle|u theta|u θ|u n|u neff|u n eff"
    "|angle u|uncertainty of angle|σ θ|σθ|sigma theta|sigma|σ|std|sd|stdev|standard deviation"
    "|unsicherheit|standardunsicherheit|messunsicherheit|incertitude|incertidumbre|incertezza"
    "|onzekerheid|不確かさ|不确定度",
    "inner_angle": "internal angle|angle internal|angle in prism|angle in the prism|base angle|angle at base"
    "|inner angle|angle at the base|innenwinkel|interner winkel|angle interne",
    "air_wavelength": "air wavelength|wavelength air|wavelength in air|λ air|luftwellenlange|wellenlange luft",
    "later": "resonance|resonance wavelength|resonanz|fringe|fringe wavelength|fsr|free spectral range"
    "|spectrum|spectrum file|extremum|structure",
}

WORDS = {  # how a meaning is called in messages and reports
    "lot": "lot",
    "wafer": "wafer",
    "site": "site",
    "x_mm": "x on the wafer",
    "y_mm": "y on the wafer",
    "measured_at": "when it was measured",
    "clock": "time of day",
    "temperature_C": "temperature",
    "tool": "measuring tool",
    "wavelength": "wavelength",
    "pol": "polarisation",
    "mode": "mode label",
    "angle": "coupling angle",
    "effective_index": "effective index",
    "reading": "readings",
    "u": "standard uncertainty of the reading",
    "inner_angle": "angle inside the prism",
    "air_wavelength": "wavelength in air",
    "later": "ring, fringe or spectrum data",
}

AMBIGUOUS = {  # headings that are met with two meanings: never guessed
    "n": "head it effective_index if these are effective indices",
    "index": "head it effective_index if these are effective indices",
    "mode index": "head it effective_index or mode, whichever it is",
    "refractive index": "head it effective_index if these are effective indices",
    "±": "head it u if it is a standard uncertainty",
    "error": "head it u if it is a standard uncertainty",
}

UNITS = {
    "nm": "nm",
    "nanometer": "nm",
    "nanometre": "nm",
    "nanometers": "nm",
    "um": "um",
    "μm": "um",
    "micron": "um",
    "microns": "um",
    "mikrometer": "um",
    "micrometer": "um",
    "micrometre": "um",
    "å": "angstrom",
    "a": "angstrom",
    "angstrom": "angstrom",
    "ångström": "angstrom",
    "mm": "mm",
    "cm": "cm",
    "°": "deg",
    "deg": "deg",
    "deg.": "deg",
    "degree": "deg",
    "degrees": "deg",
    "grad": "deg",
    "degre": "deg",
    "degré": "deg",
    "degrés": "deg",
    "grados": "deg",
    "gradi": "deg",
    "decimal degrees": "deg",
    "度": "deg",
    "'": "arcmin",
    "arcmin": "arcmin",
    "min": "arcmin",
    "arc min": "arcmin",
    '"': "arcsec",
    "arcsec": "arcsec",
    "° '": "dms",
    "°'": "dms",
    "° ' \"": "dms",
    "°'\"": "dms",
    "dms": "dms",
    "deg min": "dms",
    "deg:min": "dms",
    "deg min sec": "dms",
    "dd:mm": "dms",
    "dd:mm:ss": "dms",
    "rad": "rad",
    "radian": "rad",
    "radians": "rad",
    "mrad": "mrad",
    "gon": "gon",
    "°c": "C",
    "c": "C",
    "degc": "C",
    "deg c": "C",
    "celsius": "C",
    "k": "K",
    "kelvin": "K",
    "°f": "F",
    "f": "F",
    "fahrenheit": "F",
    "1": "1",
    "-": "1",
}
UNIT_WORDS = {
    "nm": "nm",
    "um": "µm",
    "angstrom": "Å",
    "mm": "mm",
    "cm": "cm",
    "deg": "degrees",
    "arcmin": "arc minutes",
    "arcsec": "arc seconds",
    "dms": "degrees, minutes (and seconds)",
    "rad": "radians",
    "mrad": "milliradians",
    "gon": "gon",
    "C": "°C",
    "K": "K",
    "F": "°F",
    "1": "a plain number",
}
_SUFFIXES = (
    "nm um μm micron angstrom å mm cm deg degree degrees grad rad mrad radian radians arcmin arcsec dms c k °c ° degc"
)
SUFFIX_UNITS = frozenset(_SUFFIXES.split())  # units that may end a heading without brackets, as in angle_deg
UNITS_OF = {  # which units a column of this meaning may carry
    "wavelength": ("nm", "um", "angstrom"),
    "angle": ("deg", "arcmin", "arcsec", "dms"),
    "effective_index": ("1",),
    "x_mm": ("mm", "cm", "um"),
    "y_mm": ("mm", "cm", "um"),
    "temperature_C": ("C", "K", "F"),
    "u": ("deg", "arcmin", "arcsec", "1"),
}

_SUMMARIES = (
    "mean average avg avg. median sd std std. stdev std.dev stddev min min. max max. range sum total count sigma σ ø"
    " uniformity mittelwert mittel stabw standardabweichung summe anzahl moyenne ecart-type media mediana desviacion"
    " promedio deviazione gemiddelde 平均 標準偏差 平均值"
)
SUMMARY_WORDS = frozenset(_SUMMARIES.split())
_MARKS = (
    "|-|--|---|/|n/a|na|n.a.|none|no dip|no mode|no line|not seen|not found|not measured|nd|n.d.|n.m.|missed|missing"
    "|k.a.|kein dip|keine|keine mode|nicht gemessen|pas de mode|sin modo|absent"
)
NO_READING = frozenset(_MARKS.split("|"))
_TRAILING = frozenset({"id", "no", "nr", "number", "num", "name", "nummer", "kennung", "numero"})


def normal(text: str) -> str:
    """Lower case, accents off, punctuation as single blanks."""
    decomposed = unicodedata.normalize("NFKD", text.casefold())
    bare = "".join(mark for mark in decomposed if not unicodedata.combining(mark))
    return " ".join(re.sub(r"[._\-–#:/,;=*'’&|\\\s]+", " ", unicodedata.normalize("NFC", bare)).split())


_SPELLINGS = {normal(spelling): meaning for meaning, spellings in MEANINGS.items() for spelling in spellings.split("|")}


def meaning_of(name: str) -> str | None:
    """The meaning of a heading without its unit, None if unknown. A lone capital N is the effective index."""
    if name.strip() == "N":
        return "effective_index"
    text = normal(name)
    if text in _SPELLINGS:
        return _SPELLINGS[text]
    words = text.split()
    if len(words) > 1 and words[-1] in _TRAILING:
        return _SPELLINGS.get(" ".join(words[:-1]))
    return _SPELLINGS.get(text[:-1]) if len(text) > 4 and text.endswith("s") else None


def is_summary(text: str) -> bool:
    """Whether a label heads a row of means, spreads or counts; only words, so that a site named M1 stays one."""
    words = text.casefold().replace("(", " ").replace(":", " ").replace("=", " ").split()
    return bool(words) and words[0] in SUMMARY_WORDS and not any(mark.isdigit() for mark in words[0])
