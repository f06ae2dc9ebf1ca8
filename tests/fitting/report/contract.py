"""The shape of results.json as the contract states it ("layerlot/results/1"): every field, its type, its rules.

Written from the contract's text alone, not from the code that writes the file. Fields beyond it are allowed.
"""

from __future__ import annotations

import math

QUANTITIES = {
    "index", "thickness", "width", "width_bias", "etch_depth", "sidewall", "effective_index", "group_index", "loss",
    # nuisances: "plus nuisance ones you add"
    "index_shift", "prism_index", "prism_index_TE", "prism_index_TM", "base_angle", "angle_offset",
    "prism_index_shift", "prism_index_shift_TE", "prism_index_shift_TM",
}  # fmt: skip
TEXT, NUMBER, WHOLE, FLAG = (str,), (int, float), (int,), (bool,)
TOP = {"schema": TEXT, "version": TEXT, "inputs": (list,), "sites": (list,)}
INPUT = {"file": TEXT, "sha256": TEXT}
SITE = {
    "lot": (*TEXT, type(None)), "wafer": (*TEXT, type(None)), "site": (*TEXT, type(None)),
    "x_mm": (*NUMBER, type(None)), "y_mm": (*NUMBER, type(None)), "measured_at": (*TEXT, type(None)), "status": TEXT,
    "flags": (list,), "estimates": (list,), "correlation": (list,), "fit": (dict, type(None)), "readings": (list,),
    "rivals": (list,),
}  # fmt: skip
ESTIMATE = {
    "layer": (*TEXT, type(None)), "quantity": TEXT, "axis": (*TEXT, type(None)),
    "wavelength_nm": (*NUMBER, type(None)), "value": NUMBER, "u": NUMBER, "u_random": NUMBER, "u_shared": NUMBER,
    "low95": NUMBER, "high95": NUMBER, "unit": TEXT, "origin": TEXT,
}  # fmt: skip
FIT = {
    "chi2": NUMBER,
    "dof": WHOLE,
    "p_value": (*NUMBER, type(None)),
    "readings_used": WHOLE,
    "readings_rejected": WHOLE,
}
READING = {
    "kind": TEXT, "structure": (*TEXT, type(None)), "wavelength_nm": NUMBER, "pol": TEXT, "order": (*WHOLE, type(None)),
    "measured": NUMBER, "predicted": (*NUMBER, type(None)), "u": NUMBER, "unit": TEXT, "used": FLAG, "file": TEXT,
    "sheet": (*TEXT, type(None)), "row": (*WHOLE, type(None)),
}  # fmt: skip
RIVAL = {"delta_chi2": NUMBER, "probability": NUMBER, "estimates": (list,)}


class ContractError(AssertionError):
    """The document breaks the contract; the message says where."""


def need(condition, where, what):
    """Raise ContractError with the place unless the condition holds."""
    if not condition:
        raise ContractError(f"{where}: {what}")


def fields(found, wanted, where):
    """Every field is there and of its type; a bool is no number."""
    for key, types in wanted.items():
        need(key in found, where, f"field {key} is missing")
        value = found[key]
        right = isinstance(value, types) and not (isinstance(value, bool) and bool not in types)
        need(right, where, f"field {key} is {value!r}")
        need(not isinstance(value, float) or math.isfinite(value), where, f"field {key} is {value!r}")


def check_estimate(e, where):
    """Type, unit, parts of u and interval of one estimate."""
    fields(e, ESTIMATE, where)
    need(e["quantity"] in QUANTITIES, where, f"quantity {e['quantity']}")
    need(e["axis"] in (None, "any", "in_plane", "normal"), where, f"axis {e['axis']}")
    need(e["quantity"] != "index" or e["axis"] is not None, where, "an index names its axis")
    need(e["origin"] in ("fitted", "known", "derived"), where, f"origin {e['origin']}")
    need(e["unit"] in ("1", "nm", "deg", "um"), where, f"unit {e['unit']}")
    # u² = u_random² + u_shared²; 1e-6 is far below the two digits that u has
    need(abs(e["u"] ** 2 - e["u_random"] ** 2 - e["u_shared"] ** 2) <= 1e-6 * e["u"] ** 2, where, "parts of u")
    need(e["low95"] <= e["value"] <= e["high95"], where, "value outside its interval")


def check_site(s, where):
    """One site with all it holds."""
    fields(s, SITE, where)
    need(s["status"] in ("ok", "flagged", "failed"), where, f"status {s['status']}")
    need((s["status"] == "ok") == (not s["flags"]), where, "flags and status do not agree")
    need(s["status"] != "failed" or not s["estimates"], where, "a failed site has numbers")
    for f in s["flags"]:
        fields(f, {"code": TEXT, "text": TEXT}, where)
    for k, e in enumerate(s["estimates"]):
        check_estimate(e, f"{where} estimate {k}")
    need(
        [len(row) for row in s["correlation"]] == [len(s["estimates"])] * len(s["estimates"]),
        where,
        "correlation shape",
    )
    need(all(abs(row[i] - 1) < 1e-9 for i, row in enumerate(s["correlation"])), where, "diagonal of the correlation")
    for k, r in enumerate(s["readings"]):
        fields(r, READING, f"{where} reading {k}")
        need(r["kind"] == "prism" and r["pol"] in ("TE", "TM") and r["unit"] in ("deg", "1"), where, f"reading {k}")
        need(not r["used"] or r["predicted"] is not None, where, f"reading {k} is used without a prediction")
    if s["fit"] is not None:
        fields(s["fit"], FIT, where)
        used = sum(r["used"] for r in s["readings"])
        need(s["fit"]["readings_used"] == used, where, "count of readings used")
        need(s["fit"]["readings_rejected"] == len(s["readings"]) - used, where, "count of readings rejected")
    for k, r in enumerate(s["rivals"]):
        fields(r, RIVAL, f"{where} rival {k}")
        for e in r["estimates"]:
            check_estimate(e, f"{where} rival {k}")


def check_document(d):
    """The whole document."""
    fields(d, TOP, "top")
    need(d["schema"] == "layerlot/results/1", "top", f"schema {d['schema']}")
    for f in d["inputs"]:
        fields(f, INPUT, "inputs")
        need(len(f["sha256"]) == 64 and set(f["sha256"]) <= set("0123456789abcdef"), "inputs", "SHA-256")
    for k, s in enumerate(d["sites"]):
        check_site(s, f"site {k}")
