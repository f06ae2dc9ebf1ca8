"""Synthetic wafers with known truth, for the studies of coverage, bias and mode orders.

Five families of film, each a stack file (with the standard uncertainties that the fit is told) and a rule for drawing
what nature did: the film of each site, the shared errors of each table (prism index, base angle, table zero, constants
of the layers: normal, with exactly the stated u), and the noise of each reading. All films are invented. Modes come
from `field_model`, never from the solver.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from tests.reference.field_model import coupling_angle_deg, guided_modes, leaky_modes

Array = NDArray[np.float64]
Span = tuple[float, float]
Known = tuple[float, float]  # value, standard uncertainty


@dataclass(frozen=True)
class Family:
    """One kind of wafer. Indices of substrate, oxide and prism by wavelength, one error each over all wavelengths.

    index, thickness_nm: spans the truths are drawn from, per wavelength offset `dispersion`; *_window: what the stack
    file asks to fit. normal_gap: index in the plane minus along the normal. floor_margin: modes this close above the
    cut-off (or the oxide's index) are too broad to be read. one_each: keep films with just one TE and one TM mode.
    """

    name: str
    wavelengths_nm: tuple[float, ...]
    index: Span
    index_window: Span
    thickness_nm: Span
    thickness_window: Span
    substrate: tuple[float, ...]
    substrate_u: float
    prism: tuple[float, ...]
    prism_u: float
    base_angle_deg: Known
    angle_offset_deg: Known = (0.0, 0.01)
    angle_u_deg: float = 0.01
    dispersion: tuple[Span, ...] = ((0.0, 0.0),)
    normal_gap: Span | None = None
    oxide_index: Known | None = None
    oxide_nm: tuple[Span, float] | None = None
    floor_margin: float = 0.002
    one_each: bool = False


FAMILIES: dict[str, Family] = {
    f.name: f
    for f in (
        Family(
            "nitride_on_silica", (632.8,), (1.90, 2.05), (1.80, 2.15), (300, 700), (200, 850),
            (1.4570,), 2e-4, (2.50,), 2e-4, (45.0, 0.01),
        ),
        Family(
            "nitride_on_oxide_on_silicon", (632.8,), (1.90, 2.05), (1.80, 2.15), (300, 700), (200, 850),
            (3.882,), 0.0, (2.50,), 2e-4, (45.0, 0.01),
            oxide_index=(1.4570, 5e-4), oxide_nm=((1000.0, 3000.0), 10.0), floor_margin=0.03,
        ),
        Family(
            "oxynitride_one_mode_each", (632.8,), (1.50, 1.60), (1.47, 1.70), (250, 1000), (100, 1500),
            (1.4570,), 1e-4, (1.965,), 1e-4, (60.0, 0.005), (0.0, 0.005), 0.005,
            floor_margin=0.004, one_each=True,
        ),
        Family(
            "thick_uniaxial_polymer", (632.8,), (1.55, 1.70), (1.50, 1.75), (3000, 8000), (2500, 9000),
            (1.4570,), 2e-4, (1.965,), 2e-4, (60.0, 0.01), normal_gap=(0.002, 0.03),
        ),
        Family(
            "nitride_two_wavelengths", (632.8, 1310.0), (1.95, 2.05), (1.80, 2.15), (450, 900), (300, 1000),
            (1.4570, 1.4468), 2e-4, (2.50, 2.42), 2e-4, (45.0, 0.01), dispersion=((0.0, 0.0), (-0.03, -0.015)),
        ),
    )
}  # fmt: skip


@dataclass(frozen=True)
class Truth:
    """What nature made of one site: film index and index along the normal (same where isotropic) by wavelength."""

    index: dict[float, float]
    index_normal: dict[float, float]
    thickness_nm: float


@dataclass(frozen=True)
class SyntheticTable:
    """A stack file, rows in the columns of the data files, and the answers: order of every row (None for a stray),
    truth by site, errors shared by the table, and what was done to a site."""

    stack_toml: str
    rows: tuple[dict[str, object], ...]
    orders: tuple[int | None, ...]
    truth: dict[str, Truth]
    shared: dict[str, float]
    faults: dict[str, str] = field(default_factory=dict)


def draw_tables(
    family: str, n_sites: int, sites_per_table: int, seed: int, *, labelled: bool = True
) -> list[SyntheticTable]:
    """Tables of a family, `n_sites` in all; the same seed gives the same tables. Unlabelled: no mode numbers."""
    fam = FAMILIES[family]
    rng = np.random.default_rng([seed, sorted(FAMILIES).index(family)])
    table_of = np.arange(n_sites) // sites_per_table
    shared = _draw_shared(fam, rng, int(table_of[-1]) + 1)
    oxide_nominal = rng.uniform(*fam.oxide_nm[0], len(shared["base"])).round(0) if fam.oxide_nm else None
    film = _draw_films(fam, rng, shared, oxide_nominal, table_of)
    lists: list[list[tuple[dict[str, object], int]]] = [[] for _ in range(n_sites)]
    for w, wave in enumerate(fam.wavelengths_nm):
        for pol in ("TE", "TM"):
            N = film.modes[w, pol]
            n_p = fam.prism[w] + shared["prism"][table_of]
            base = fam.base_angle_deg[0] + shared["base"][table_of]
            angle = coupling_angle_deg(N, n_p[:, None], base[:, None]) - shared["zero"][table_of][:, None]
            angle = angle + rng.normal(0.0, fam.angle_u_deg, angle.shape)
            for s, m in zip(*np.nonzero(np.isfinite(angle)), strict=True):
                row = {"site": f"s{s}", "wavelength_nm": wave, "pol": pol, "mode": int(m) if labelled else None}
                lists[s].append((row | {"angle_deg": float(angle[s, m])}, int(m)))
    out = []
    for k in range(int(table_of[-1]) + 1):
        sites = np.flatnonzero(table_of == k)
        entries = [e for s in sites for e in lists[s]]
        nominal = None if oxide_nominal is None else float(oxide_nominal[k])
        out.append(
            SyntheticTable(
                stack_toml(fam, nominal),
                tuple(row for row, _ in entries),
                tuple(m for _, m in entries),
                {f"s{s}": film.truth(fam, int(s)) for s in sites},
                {name: float(values[k]) for name, values in shared.items()},
            )
        )
    return out


def _draw_shared(fam: Family, rng: np.random.Generator, tables: int) -> dict[str, Array]:
    u = {
        "prism": fam.prism_u,
        "base": fam.base_angle_deg[1],
        "zero": fam.angle_offset_deg[1],
        "substrate": fam.substrate_u,
        "oxide_index": fam.oxide_index[1] if fam.oxide_index else 0.0,
        "oxide_nm": fam.oxide_nm[1] if fam.oxide_nm else 0.0,
    }
    return {name: rng.normal(0.0, sigma, tables) for name, sigma in u.items()}


@dataclass
class _Films:
    """n (S, W), gap (S), t_nm (S), and readable modes (S, M) by (wavelength number, polarisation)."""

    n: Array
    gap: Array
    t_nm: Array
    modes: dict[tuple[int, str], Array]

    def truth(self, fam: Family, s: int) -> Truth:
        index = {wave: float(self.n[s, w]) for w, wave in enumerate(fam.wavelengths_nm)}
        normal = {wave: n - float(self.gap[s]) for wave, n in index.items()}
        return Truth(index, normal, float(self.t_nm[s]))


def _draw_films(
    fam: Family, rng: np.random.Generator, shared: dict[str, Array], oxide_nm: Array | None, table_of: NDArray[np.int64]
) -> _Films:
    """Films by the family's rule, drawn anew where the rule on the number of modes is not met."""
    count, waves = table_of.size, len(fam.wavelengths_nm)
    film = _Films(np.full((count, waves), np.nan), np.zeros(count), np.full(count, np.nan), {})
    todo = np.arange(count)
    parts: dict[tuple[int, str], list[tuple[NDArray[np.int64], Array]]] = {}
    for _ in range(100):
        n0 = rng.uniform(*fam.index, todo.size)
        film.n[todo] = n0[:, None] + np.column_stack([rng.uniform(*d, todo.size) for d in fam.dispersion])
        film.t_nm[todo] = rng.uniform(*fam.thickness_nm, todo.size)
        film.gap[todo] = rng.uniform(*fam.normal_gap, todo.size) if fam.normal_gap else 0.0
        modes, accepted = _readable(fam, film, shared, oxide_nm, table_of, todo)
        for key, N in modes.items():
            parts.setdefault(key, []).append((todo[accepted], N[accepted]))
        todo = todo[~accepted]
        if not todo.size:
            break
    if todo.size:
        raise ArithmeticError(f"{fam.name}: no film meets the rule on the number of modes")
    for key, chunks in parts.items():
        most = max(N.shape[1] for _, N in chunks)
        film.modes[key] = np.full((count, most), np.nan)
        for rows, N in chunks:
            film.modes[key][rows, : N.shape[1]] = N
    return film


def _readable(
    fam: Family,
    film: _Films,
    shared: dict[str, Array],
    oxide_nm: Array | None,
    table_of: NDArray[np.int64],
    rows: NDArray[np.int64],
) -> tuple[dict[tuple[int, str], Array], NDArray[np.bool_]]:
    """Readable modes of the sites `rows`, and which of them meet the family's rule."""
    k = table_of[rows]
    ones = np.ones(rows.size)
    modes = {}
    accepted = np.ones(rows.size, dtype=bool)
    for w, wave in enumerate(fam.wavelengths_nm):
        n_film, t = film.n[rows, w], film.t_nm[rows] / 1000
        below = fam.substrate[w] + shared["substrate"][k]
        for pol in ("TE", "TM"):
            if fam.oxide_index and oxide_nm is not None:
                n_ox, t_ox = fam.oxide_index[0] + shared["oxide_index"][k], (oxide_nm[k] + shared["oxide_nm"][k]) / 1000
                z = leaky_modes(
                    np.column_stack([below, n_ox, n_film, ones]), np.column_stack([t_ox, t]), wave / 1000, pol == "TM"
                )
                N, floor = z.real, n_ox
            else:
                n = np.column_stack([below, n_film, ones])
                nn = np.column_stack([below, n_film - film.gap[rows], ones])
                N, floor = guided_modes(n, t[:, None], wave / 1000, pol == "TM", nn), below
            if fam.one_each:
                accepted &= (np.isfinite(N).sum(axis=1) == 1) & (N[:, 0] > floor + fam.floor_margin)
            modes[w, pol] = np.where(floor[:, None] + fam.floor_margin < N, N, np.nan)
            accepted &= np.isfinite(modes[w, pol]).any(axis=1)
    return modes, accepted


def stack_toml(fam: Family, oxide_nm: float | None = None) -> str:
    """The stack file that goes with the family's tables: nominal values with their standard uncertainties."""
    lines = [f'title = "{fam.name} (invented)"', ""]
    layers = [("substrate", _index(fam, fam.substrate, fam.substrate_u), "")]
    if fam.oxide_index and fam.oxide_nm:
        value, u = fam.oxide_index
        thick = f"thickness_nm = {{ value = {oxide_nm}, u = {fam.oxide_nm[1]} }}"
        layers.append(("oxide", f"{{ value = {value}, u = {u} }}", thick))
    low, high = fam.index_window
    t_low, t_high = fam.thickness_window
    fit = f"{{ fit = [{low}, {high}] }}"
    extra = f"thickness_nm = {{ fit = [{t_low}, {t_high}] }}"
    layers.append(("film", fit, extra + (f"\nindex_normal = {fit}" if fam.normal_gap else "")))
    layers.append(("cover", "1.0", ""))
    for name, index, rest in layers:
        lines += ["[[layer]]", f'name = "{name}"', f"index = {index}", *([rest] if rest else []), ""]
    base, zero = fam.base_angle_deg, fam.angle_offset_deg
    lines += [
        "[prism]",
        f"index = {_index(fam, fam.prism, fam.prism_u)}",
        f"base_angle_deg = {{ value = {base[0]}, u = {base[1]} }}",
        f"angle_offset_deg = {{ value = {zero[0]}, u = {zero[1]} }}",
        f"angle_u_deg = {fam.angle_u_deg}",
    ]
    return "\n".join(lines) + "\n"


def _index(fam: Family, values: tuple[float, ...], u: float) -> str:
    if len(values) == 1:
        return f"{{ value = {values[0]}, u = {u} }}" if u else f"{values[0]}"
    table = ", ".join(f"[{wave}, {n}]" for wave, n in zip(fam.wavelengths_nm, values, strict=True))
    return f"{{ table = [{table}], shift = {{ value = 0.0, u = {u} }} }}"


def spoil(table: SyntheticTable, kind: str, seed: int) -> SyntheticTable:
    """Do one thing wrong to every site: `missed` drops a reading, `stray` adds one anywhere in the scan range (the
    readings' own range and a degree on either side), `whole_degree` moves one by 1 to 9 whole degrees either way."""
    rng = np.random.default_rng([seed, 77])
    rows, orders, faults = [], [], {}
    for site in table.truth:
        mine = [(r, m) for r, m in zip(table.rows, table.orders, strict=True) if r["site"] == site]
        hit = int(rng.integers(len(mine)))
        if kind == "missed":
            gone, order = mine.pop(hit)
            faults[site] = f"missed {gone['pol']}{order}"
        elif kind == "stray":
            angles = [float(r["angle_deg"]) for r, _ in mine]  # type: ignore[arg-type]
            angle = float(rng.uniform(min(angles) - 1, max(angles) + 1))
            mine.insert(hit, (mine[hit][0] | {"angle_deg": angle}, None))  # type: ignore[arg-type]
            faults[site] = f"stray at {angle:.3f}"
        elif kind == "whole_degree":
            row, order = mine[hit]
            shift = int(rng.integers(1, 10)) * (1 if rng.random() < 0.5 else -1)
            mine[hit] = (row | {"angle_deg": float(row["angle_deg"]) + shift}, None)  # type: ignore[arg-type]
            faults[site] = f"{row['pol']}{order} typed {shift:+d} degrees off"
        else:
            raise ValueError(f"no fault called {kind}")
        rows += [r for r, _ in mine]
        orders += [m for _, m in mine]
    return replace(table, rows=tuple(rows), orders=tuple(orders), faults=faults)
