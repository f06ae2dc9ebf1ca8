"""What a fit costs: one site against a bare least-squares call, and a whole workbook through the command line.

Run by hand: `python tests/bench/bench_fit.py`. The site has 8 labelled readings (TE and TM at two wavelengths). The
bare call is scipy.optimize.least_squares on the same closed-form residuals and Jacobian, nuisances and priors included,
from a start 1 % off; it gives no orders, no intervals, no flags. The workbook has 25 wafers of 49 sites, 1,225 in all.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from scipy.optimize import least_squares

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from layerlot.fitting.inverse import fit_table
from layerlot.fitting.inverse.descent import Prior, linearise
from layerlot.fitting.inverse.problem import SiteProblem, build_problems
from layerlot.fitting.stack import parse_stack

from tests.bench.machine import best_seconds, describe
from tests.fitting.synthetic import readings_of
from tests.reference.truth import SyntheticTable, draw_tables

RATIO_TARGET, SITE_TARGET_MS, BOOK_TARGET_S = 15.0, 10.0, 30.0
WAFERS, SITES = 25, 49


def eight_readings(table: SyntheticTable) -> list[str]:
    """Sites of a table with just 8 readings."""
    count: dict[str, int] = {}
    for row in table.rows:
        count[str(row["site"])] = count.get(str(row["site"]), 0) + 1
    return [site for site, n in count.items() if n == 8]


def bare(problem: SiteProblem) -> None:
    """One plain least-squares call on the site's residuals and Jacobian."""
    layout, data, orders = problem.layout, problem.data, problem.label[None, :]
    prior = Prior.of(layout)
    has = np.flatnonzero(np.diag(prior.precision) > 0)
    weight = np.zeros((has.size, len(layout.parameters)))
    weight[np.arange(has.size), has] = np.sqrt(np.diag(prior.precision)[has])

    def residual(x: np.ndarray) -> np.ndarray:
        lin = linearise(layout, data, x[None, :], orders)
        return np.concatenate([lin.residual[0], weight @ (prior.mean - x)])

    def jacobian(x: np.ndarray) -> np.ndarray:
        lin = linearise(layout, data, x[None, :], orders)
        return np.concatenate([-lin.jacobian[0], -weight])

    out = least_squares(residual, bare.start, jac=jacobian, x_scale="jac")  # type: ignore[attr-defined]
    assert out.success
    bare.solution = out.x  # type: ignore[attr-defined]


def one_site() -> tuple[float, float, float]:
    """Seconds of the bare call, of one site alone through the product, and of one site among many."""
    table = draw_tables("nitride_two_wavelengths", 2000, 2000, seed=5)[0]
    stack = parse_stack(table.stack_toml, "stack.toml")
    sites = eight_readings(table)
    rows = {site: [r for r in table.rows if r["site"] == site] for site in sites}
    alone = readings_of(rows[sites[0]])
    many = readings_of([r for site in sites[:160] for r in rows[site]])
    problem = build_problems(stack, alone)[0]
    answer = fit_table(stack, alone).sites[0]
    fitted = {(e.quantity, e.wavelength_nm): e.value for e in answer.estimates if e.origin == "fitted"}
    start = problem.layout.starts()
    for i, p in enumerate(problem.layout.parameters):
        if p.fitted:
            start[i] = fitted[p.quantity, p.wavelength_nm] / p.scale * (1.01 if p.quantity == "thickness" else 0.99)
    bare.start = start  # type: ignore[attr-defined]
    t_bare = best_seconds(lambda: bare(problem), 15)
    t_alone = best_seconds(lambda: fit_table(stack, alone), 15)
    t_many = best_seconds(lambda: fit_table(stack, many), 3) / 160
    for i, p in enumerate(problem.layout.parameters):
        if p.fitted:
            # Both stop at the same minimum: a thousandth of any standard uncertainty here.
            assert abs(bare.solution[i] * p.scale / fitted[p.quantity, p.wavelength_nm] - 1) < 1e-6  # type: ignore[attr-defined]
    return t_bare, t_alone, t_many


def workbook(folder: Path) -> tuple[Path, Path, int]:
    """A stack file and a workbook of 25 wafers with 49 sites each."""
    from openpyxl import Workbook

    table = draw_tables("nitride_two_wavelengths", WAFERS * SITES, WAFERS * SITES, seed=6)[0]
    stack, book = folder / "stack.toml", folder / "wafers.xlsx"
    stack.write_text(table.stack_toml, encoding="utf-8")
    out = Workbook(write_only=True)
    sheet = out.create_sheet("readings")
    sheet.append(["Lot", "Wafer", "Site", "x (mm)", "y (mm)", "Wavelength (nm)", "Pol", "Mode", "Angle (deg)"])
    for row in table.rows:
        wafer, site = divmod(int(str(row["site"])[1:]), SITES)
        x, y = 20.0 * (site % 7 - 3), 20.0 * (site // 7 - 3)
        where = ["L1", f"W{wafer + 1:02d}", site + 1, x, y]
        sheet.append([*where, row["wavelength_nm"], row["pol"], row["mode"], round(float(str(row["angle_deg"])), 4)])
    out.save(book)
    return stack, book, len(table.rows)


def whole_workbook() -> tuple[float, int]:
    """Seconds from the command to the written reports, on two workers; and the number of readings."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        stack, book, count = workbook(folder)
        command = [sys.executable, "-m", "layerlot.fitting.cli", "fit", str(stack), str(book)]
        start = time.perf_counter()
        done = subprocess.run(
            [*command, "--out", str(folder / "out"), "--workers", "2"], check=False, capture_output=True, text=True
        )
        seconds = time.perf_counter() - start
        if done.returncode not in {0, 1}:
            raise RuntimeError(done.stderr)
        print(f"exit status {done.returncode}; " + ", ".join(sorted(p.name for p in (folder / "out").iterdir())))
    return seconds, count


def main() -> int:
    print(describe(), "\n", sep="")
    t_bare, t_alone, t_many = one_site()
    print("| one site of 8 labelled readings | ms | times the bare call |\n|---|---|---|")
    for name, s in (("bare least_squares", t_bare), ("fit_table, site alone", t_alone), ("a site of 160", t_many)):
        print(f"| {name} | {s * 1e3:.2f} | {s / t_bare:.1f} |")
    print(f"targets: {RATIO_TARGET:.0f} times, {SITE_TARGET_MS:.0f} ms\n")
    seconds, count = whole_workbook()
    print(f"{WAFERS} wafers, {WAFERS * SITES} sites, {count} readings: {seconds:.1f} s (target {BOOK_TARGET_S:.0f} s)")
    good = t_alone / t_bare <= RATIO_TARGET and t_many * 1e3 < SITE_TARGET_MS and seconds < BOOK_TARGET_S
    return 0 if good else 1


if __name__ == "__main__":
    raise SystemExit(main())
