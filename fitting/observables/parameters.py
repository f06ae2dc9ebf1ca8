"""The unknowns of a film fit and the linear maps from them to layer indices, thicknesses and prism constants.

Every quantity of a stack file is linear in the unknowns (an index is its own unknown, a shift adds to a material's
curve, a Cauchy curve is linear in its coefficients), so the maps are plain matrices and the chain rule is one product.

Working units: lengths in µm; indices relative to the stack's `index_reference`, wavelengths in that medium. The mode
equation only knows n / wavelength, so this is exact, and estimates come out in the units that the user typed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from ..records import Array, BoolArray
from ..stack import IndexSpec, Prism, Quantity, Stack

_NO_PRIOR = float("inf")


@dataclass(frozen=True, slots=True)
class Parameter:
    """One unknown. fitted: asked for by the stack file; shared: common to every site of a table.

    prior_u is infinite where there is no prior. `scale` turns the working unit into `unit` (1000 for µm to nm).
    """

    name: str
    label: str
    layer: str | None
    quantity: str
    unit: str
    scale: float
    fitted: bool
    shared: bool
    start: float
    low: float
    high: float
    prior_mean: float = 0.0
    prior_u: float = _NO_PRIOR
    axis: str | None = None
    wavelength_nm: float | None = None


@dataclass(frozen=True, slots=True)
class Context:
    """What a reading's optics depend on beside the unknowns: wavelength (as typed), polarisation, temperature."""

    wavelength_um: float
    tm: bool
    temperature_C: float | None


@dataclass(frozen=True)
class Layout:
    """Unknowns (P of them) and maps for a list of contexts (C): value = fixed + map @ unknowns.

    n (C, L), n_normal (C, L), t_um (L-2), prism index (C), base angle, table zero; `working_um` (C) is the wavelength
    in the reference medium. `curves` names derived indices: (layer, axis, wavelength_nm, row of length P, offset).
    """

    parameters: tuple[Parameter, ...]
    contexts: tuple[Context, ...]
    working_um: Array
    tm: BoolArray
    n_fixed: Array
    n_map: Array
    normal_fixed: Array
    normal_map: Array
    uniaxial: bool
    t_fixed: Array
    t_map: Array
    prism_fixed: Array
    prism_map: Array
    base_fixed: float
    base_map: Array
    zero_fixed: float
    zero_map: Array
    angle_sign: int
    has_prism: bool
    curves: tuple[tuple[str, str, float, Array, float], ...] = ()

    def index_of(self, name: str) -> int:
        return next(i for i, p in enumerate(self.parameters) if p.name == name)

    @property
    def shared(self) -> BoolArray:
        return np.array([p.shared for p in self.parameters], dtype=bool)

    @property
    def fitted(self) -> BoolArray:
        return np.array([p.fitted for p in self.parameters], dtype=bool)

    def leaks(self) -> bool:
        """Whether the stack at its start values has a half-space of at least the films' index."""
        n = self.n_fixed + self.n_map @ self.starts()
        return bool((np.maximum(n[:, 0], n[:, -1]) >= n[:, 1:-1].max(axis=1)).all())

    def bounds(self) -> tuple[Array, Array]:
        return np.array([p.low for p in self.parameters]), np.array([p.high for p in self.parameters])

    def starts(self) -> Array:
        return np.array([p.start for p in self.parameters])

    def window_weight(self) -> Array:
        """A trace of the knowledge that a fitted unknown lies in its window, as a diagonal information (P, P).

        It keeps matrices regular where the readings leave a direction open (the rank test keeps such a number from
        being written), and is too weak to move any other: a millionth of what an even spread over the window says.
        """
        low, high = self.bounds()
        width = high - low
        return np.diag(np.where(self.fitted & np.isfinite(width), 12e-6 / width**2, 0.0))

    def prior(self) -> tuple[Array, Array]:
        """Prior means (P) and standard uncertainties (P), infinite where there is none."""
        return np.array([p.prior_mean for p in self.parameters]), np.array([p.prior_u for p in self.parameters])


@dataclass
class _Builder:
    """Collects parameters by name and sparse rows; turned into matrices at the end."""

    parameters: list[Parameter] = field(default_factory=list)

    def add(self, parameter: Parameter) -> int:
        for i, known in enumerate(self.parameters):
            if known.name == parameter.name:
                return i
        self.parameters.append(parameter)
        return len(self.parameters) - 1


Row = tuple[float, dict[int, float]]  # fixed part, and coefficient by parameter


def build_layout(stack: Stack, contexts: Sequence[Context]) -> Layout:
    """Unknowns and maps of a stack for the contexts that occur in a site's readings."""
    builder = _Builder()
    waves = sorted({c.wavelength_um for c in contexts})
    mean_x = float(np.mean([1 / w**2 for w in waves]))
    n_rows = [[_index(builder, stack, k, c, "in_plane", mean_x) for k in range(len(stack.layers))] for c in contexts]
    m_rows = [[_index(builder, stack, k, c, "normal", mean_x) for k in range(len(stack.layers))] for c in contexts]
    curves = _curves(builder, stack, contexts, mean_x)
    t_rows = [_thickness(builder, layer.name, layer.thickness_um) for layer in stack.layers[1:-1]]
    uniaxial = any(layer.index_normal is not None for layer in stack.layers)
    prism = stack.prism
    p_rows = [_prism(builder, stack, prism, c) if prism else (np.nan, {}) for c in contexts]
    base = _plain(builder, prism.base_angle_deg, "base_angle", "base angle of the prism", "deg") if prism else (0.0, {})
    zero = _plain(builder, prism.angle_offset_deg, "angle_offset", "table zero", "deg") if prism else (0.0, {})
    count = len(builder.parameters)

    def vector(row: Row) -> Array:
        out = np.zeros(count)
        for i, value in row[1].items():
            out[i] = value
        return out

    def matrix(rows: Sequence[Row]) -> Array:
        return np.array([vector(r) for r in rows]).reshape(len(rows), count)

    working = np.array([_working_um(stack, c.wavelength_um) for c in contexts])
    return Layout(
        parameters=tuple(builder.parameters),
        contexts=tuple(contexts),
        working_um=working,
        tm=np.array([c.tm for c in contexts], dtype=bool),
        n_fixed=np.array([[r[0] for r in rows] for rows in n_rows]),
        n_map=np.array([matrix(rows) for rows in n_rows]),
        normal_fixed=np.array([[r[0] for r in rows] for rows in m_rows]),
        normal_map=np.array([matrix(rows) for rows in m_rows]),
        uniaxial=uniaxial,
        t_fixed=np.array([r[0] for r in t_rows]),
        t_map=matrix(t_rows),
        prism_fixed=np.array([r[0] for r in p_rows]),
        prism_map=matrix(p_rows),
        base_fixed=base[0],
        base_map=vector(base),
        zero_fixed=zero[0],
        zero_map=vector(zero),
        angle_sign=prism.angle_sign if prism else 1,
        has_prism=prism is not None,
        curves=tuple((name, axis, nm, vector(row), row[0]) for name, axis, nm, row in curves),
    )


def _working_um(stack: Stack, wavelength_um: float) -> float:
    vacuum = stack.to_vacuum_um(wavelength_um)
    return float(vacuum / stack.index_inside(1.0, vacuum))


def _quantity(builder: _Builder, q: Quantity, make: dict[str, object], scale_row: float = 1.0) -> Row:
    """A row for one quantity: exact gives a constant, known and fit give an unknown."""
    if q.kind == "exact":
        return float(q.value or 0.0), {}
    if q.kind == "known":
        assert q.value is not None
        if q.u == 0:
            return float(q.value), {}
        # Twenty standard uncertainties: wide enough never to be felt, narrow enough to keep steps in the physical
        # range.
        bounds = {"low": q.value - 20 * q.u, "high": q.value + 20 * q.u, "start": q.value}
        p = Parameter(fitted=False, prior_mean=q.value, prior_u=q.u, **bounds, **make)  # type: ignore[arg-type]
    else:
        assert q.low is not None and q.high is not None
        start = q.start if q.start is not None else (q.low + q.high) / 2
        p = Parameter(fitted=True, low=q.low, high=q.high, start=start, **make)  # type: ignore[arg-type]
    return 0.0, {builder.add(p): scale_row}


def _plain(builder: _Builder, q: Quantity, name: str, label: str, unit: str) -> Row:
    make: dict[str, object] = {
        "name": name,
        "label": label,
        "layer": None,
        "quantity": name,
        "unit": unit,
        "scale": 1.0,
        "shared": True,
    }
    return _quantity(builder, q, make)


def _thickness(builder: _Builder, layer: str, q: Quantity | None) -> Row:
    assert q is not None, f"layer {layer} has no thickness"
    make: dict[str, object] = {
        "name": f"thickness:{layer}", "label": f"thickness of {layer}", "layer": layer, "quantity": "thickness",
        "unit": "nm", "scale": 1000.0, "shared": False,
    }  # fmt: skip
    return _quantity(builder, q, make)


def _index(builder: _Builder, stack: Stack, k: int, c: Context, axis: str, mean_x: float) -> Row:
    layer = stack.layers[k]
    spec = layer.index
    axis_name = "any" if layer.index_normal is None else axis
    if axis == "normal" and layer.index_normal is not None:
        spec = layer.index_normal
    return _spec(builder, stack, spec, layer.name, axis_name, c, mean_x)


def _spec(builder: _Builder, stack: Stack, spec: IndexSpec, layer: str, axis: str, c: Context, mean_x: float) -> Row:
    along = "" if axis == "any" else " along the normal" if axis == "normal" else " in the plane"
    base: dict[str, object] = {"layer": layer, "axis": axis, "unit": "1", "scale": 1.0}
    nm = round(c.wavelength_um * 1000, 6)
    if spec.kind == "quantity":
        q = spec.quantity
        assert q is not None
        if q.kind == "fit":
            make = base | {
                "name": f"index:{layer}:{axis}:{nm:g}", "label": f"index of {layer}{along} at {nm:g} nm",
                "quantity": "index", "wavelength_nm": nm, "shared": False,
            }  # fmt: skip
        else:
            make = base | {
                "name": f"index:{layer}:{axis}",
                "label": f"index of {layer}{along}",
                "quantity": "index",
                "shared": True,
            }
        return _quantity(builder, q, make)
    if spec.kind == "fit_cauchy":
        return _cauchy(builder, stack, spec, base, along, c, mean_x)
    vacuum = stack.to_vacuum_um(c.wavelength_um)
    inside = spec.index_inside(stack, vacuum, c.temperature_C)
    fixed = float(stack.index_typed(inside, vacuum))
    row: dict[int, float] = {}
    if spec.shift is not None:
        make = base | {
            "name": f"index_shift:{layer}:{axis}",
            "label": f"index shift of {layer}{along}",
            "quantity": "index_shift",
            "shared": spec.shift.kind == "known",
        }
        extra, row = _quantity(builder, spec.shift, make)
        fixed += extra
    return fixed, row


def _cauchy(
    builder: _Builder, stack: Stack, spec: IndexSpec, base: dict[str, object], along: str, c: Context, mean_x: float
) -> Row:
    """n = c0 + c1 (x - x0) + c2 (x^2 - x0^2), x = 1 / wavelength^2: c0 is the index at x0, far better conditioned
    than A."""
    layer, axis = base["layer"], base["axis"]
    near0, near1 = near_curve(stack, spec, mean_x)
    x = 1 / c.wavelength_um**2
    row: dict[int, float] = {}
    windows = [(near0, 0.25, "1", 1.0), (near1, 0.1, "µm²", x - mean_x), (0.0, 0.02, "µm⁴", x**2 - mean_x**2)]
    for i, (start, half, unit, factor) in enumerate(windows[: spec.cauchy_terms]):
        p = Parameter(
            name=f"curve{i}:{layer}:{axis}", label=f"curve term {i} of {layer}{along}", quantity=f"curve_term_{i}",
            shared=False, fitted=True, start=start, low=start - half, high=start + half,
            **(base | {"unit": unit}),  # type: ignore[arg-type]
        )  # fmt: skip
        row[builder.add(p)] = factor
    return 0.0, row


def near_curve(stack: Stack, spec: IndexSpec, mean_x: float) -> tuple[float, float]:
    """Index at 1/wavelength^2 = mean_x and slope in 1/wavelength^2 of the curve that a Cauchy fit starts near."""
    if isinstance(spec.near, (int, float)):
        return float(spec.near), 0.005
    assert spec.near is not None
    lam = np.array([mean_x**-0.5, mean_x**-0.5 * 1.001])
    vacuum = stack.to_vacuum_um(lam)
    n = stack.index_typed(spec.near.index(vacuum), vacuum)
    return float(n[0]), float((n[1] - n[0]) / (1 / lam[1] ** 2 - 1 / lam[0] ** 2))


def _curves(
    builder: _Builder, stack: Stack, contexts: Sequence[Context], mean_x: float
) -> list[tuple[str, str, float, Row]]:
    """Indices that are functions of unknowns rather than unknowns: Cauchy curves and shifted materials, per
    wavelength."""
    out = []
    for layer in stack.layers:
        for spec, axis in ((layer.index, "in_plane"), (layer.index_normal, "normal")):
            if spec is None:
                continue
            shifted = spec.shift is not None and spec.shift.kind == "fit"
            if spec.kind != "fit_cauchy" and not shifted:
                continue
            name = "any" if layer.index_normal is None else axis
            for wave in sorted({c.wavelength_um for c in contexts}):
                c = next(c for c in contexts if c.wavelength_um == wave)
                row = _spec(builder, stack, spec, layer.name, name, c, mean_x)
                out.append((layer.name, name, round(wave * 1000, 6), row))
    return out


def _prism(builder: _Builder, stack: Stack, prism: Prism, c: Context) -> Row:
    spec = prism.index_TM if c.tm and not prism.one_index else prism.index_TE
    suffix = "" if prism.one_index else ("_TM" if c.tm else "_TE")
    vacuum = stack.to_vacuum_um(c.wavelength_um)
    make: dict[str, object] = {
        "name": f"prism_index{suffix}", "label": f"prism index{suffix.replace('_', ' ')}", "layer": None,
        "quantity": f"prism_index{suffix}", "unit": "1", "scale": 1.0, "shared": True,
    }  # fmt: skip
    if spec.kind == "quantity":
        assert spec.quantity is not None
        return _quantity(builder, spec.quantity, make)
    fixed = float(stack.index_typed(spec.index_inside(stack, vacuum, c.temperature_C), vacuum))
    if spec.shift is None:
        return fixed, {}
    shift = {
        "name": f"prism_shift{suffix}", "label": f"shift of the prism index{suffix.replace('_', ' ')}",
        "quantity": f"prism_index_shift{suffix}",
    }  # fmt: skip
    extra, row = _quantity(builder, spec.shift, make | shift)
    return fixed + extra, row
