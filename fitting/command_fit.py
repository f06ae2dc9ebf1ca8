"""The bodies of `fit` and `demo`: inputs checked together, sites fitted, three reports moved into place."""

from __future__ import annotations

import hashlib
import os
import shutil
import signal
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING

import click

from .output import RESULTS, folder_faults, write_folder
from .records import Fault, FitResult, InputFile, InputRefused, Place, Status
from .stack import Stack, load_stack

if TYPE_CHECKING:
    from .importers import Imported

DEMO_STACK, DEMO_DATA = "nitride_on_silica.toml", "monitor_wafers.xlsx"


def run_fit(stack_file: Path, data: Sequence[Path], out: Path, workers: int | None, as_json: bool) -> int:
    """Fit and write; returns the exit status. Raises InputRefused with the faults of stack, data and folder."""
    result = _fit_and_write(stack_file, data, out, folder_faults(out), workers or _cores())
    if as_json:
        click.echo((out / RESULTS).read_text(encoding="utf-8"), nl=False)
    else:
        _tell(result, out)
    return _status(result)


def run_demo(out: Path, workers: int | None) -> int:
    """The same job on the shipped lot, whose stack file and workbook are laid beside the reports."""
    from layerlot.datasets import folder

    inputs = (DEMO_STACK, DEMO_DATA)
    with folder("demo") as shipped:
        faults = folder_faults(out, also_ours=inputs)
        for name in inputs:
            if (out / name).exists() and (out / name).read_bytes() != (shipped / name).read_bytes():
                required, remedy = "the shipped file is required", "name another folder with --out"
                faults.append(Fault(Place(str(out / name)), "a file that was changed", required, remedy))
        if faults:
            raise InputRefused(faults)
        out.mkdir(parents=True, exist_ok=True)
        for name in inputs:
            shutil.copyfile(shipped / name, out / name)
    result = _fit_and_write(out / DEMO_STACK, [out / DEMO_DATA], out, [], workers or _cores())
    click.echo("The shipped lot is invented: its maker, films and numbers exist nowhere.\n")
    _tell(result, out)
    click.echo(f"Inputs: {out / DEMO_STACK}, {out / DEMO_DATA}")
    return _status(result)


def _fit_and_write(
    stack_file: Path, data: Sequence[Path], out: Path, faults: Sequence[Fault], workers: int
) -> FitResult:
    stack, imported, inputs = _read(stack_file, data, faults)
    from .inverse import fit_table

    # An interrupt while the reports are written must not cost the fit: it is over, and they follow at once.
    with _stop_on_interrupt() as should_stop:
        with _progress() as progress:
            fitted = fit_table(stack, imported.readings, workers=workers, progress=progress, should_stop=should_stop)
        if fitted.interrupted:
            click.echo("Stopped before the last site: the reports hold what was done.", err=True)
        result = replace(fitted, inputs=inputs, skipped_rows=imported.skipped)
        _write(result, out)
    return result


def _read(
    stack_file: Path, data: Sequence[Path], faults: Sequence[Fault]
) -> tuple[Stack, Imported, tuple[InputFile, ...]]:
    """Stack, tables and the list of input files. Raises InputRefused with the given faults and those of both."""
    from .importers import read_tables

    stack: Stack | None = None
    found: list[Fault] = []
    try:
        stack = load_stack(stack_file)
    except InputRefused as refused:
        found += refused.faults
    imported = read_tables(data)
    found += [*faults, *imported.faults]
    if not imported.readings and not imported.faults:
        place = Place(", ".join(str(p) for p in data))
        found.append(
            Fault(place, "no readings", "a table with one reading at least is required", "see layerlot inspect")
        )
    if found or stack is None:
        raise InputRefused(found)
    stack_input = InputFile(str(stack_file), hashlib.sha256(stack_file.read_bytes()).hexdigest())
    return stack, imported, (stack_input, *imported.inputs)


def _write(result: FitResult, out: Path) -> None:
    from .report.write import write_reports

    try:
        write_folder(out, lambda beside: write_reports(result, beside))
    except OSError as error:
        was = f"cannot be written ({error.strerror or error})"
        raise InputRefused(
            [Fault(Place(str(out)), was, "room and rights are required", "name another folder")]
        ) from None


def _tell(result: FitResult, out: Path) -> None:
    from .report.summary import summary_text

    click.echo(summary_text(result))
    click.echo(f"Report: {out / 'report.html'}")


def _status(result: FitResult) -> int:
    bad = result.interrupted or result.shared_flags or any(s.status is not Status.OK for s in result.sites)
    return 1 if bad else 0


def _cores() -> int:
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


@contextmanager
def _stop_on_interrupt() -> Iterator[Callable[[], bool]]:
    """The first Ctrl-C asks the fit to stop, the second raises KeyboardInterrupt."""
    asked = False

    def handle(_: int, __: FrameType | None) -> None:
        nonlocal asked
        if asked:
            raise KeyboardInterrupt
        asked = True
        click.echo("Stopping after the running sites; what is done is kept. Ctrl-C again stops at once.", err=True)

    before = signal.signal(signal.SIGINT, handle)
    try:
        yield lambda: asked
    finally:
        signal.signal(signal.SIGINT, before)


@contextmanager
def _progress() -> Iterator[Callable[[int, int], None] | None]:
    """A bar on standard error, on a terminal only."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

    columns = (TextColumn("Fitting sites"), BarColumn(), TextColumn("{task.percentage:.0f} %"), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("", total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)
