"""The command line: what each command takes, and how faults and exit statuses come out. Bodies are in `command_*`.

Exit status: 0 done and nothing flagged; 1 done, something flagged, failed or stopped; 2 the input was refused; 3 the
program itself is at fault. Nothing heavy is imported before a command needs it.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from .records import Fault

OK, FLAGGED, REFUSED, BROKEN = 0, 1, 2, 3
SHOW_TRACEBACK = "LAYERLOT_TRACEBACK"
_FILE = click.Path(path_type=Path)


class _ManyNumbers(click.Command):
    """Lets an option that may be repeated take several numbers in a row: --wavelength-nm 632.8 1550."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        out: list[str] = []
        option = ""
        for arg in args:
            if arg.startswith("--"):
                option = arg if arg == "--wavelength-nm" else ""
            elif option and out[-1] != option:
                if _is_number(arg):
                    out.append(option)
                else:
                    option = ""
            out.append(arg)
        return super().parse_args(ctx, out)


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _version(ctx: click.Context, _: click.Parameter, wanted: bool) -> None:
    if wanted and not ctx.resilient_parsing:
        from importlib.metadata import version

        click.echo(f"layerlot {version('layerlot')}")
        ctx.exit()


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_version, help="Print the version."
)
def layerlot() -> None:
    """Film index and thickness from prism-coupler readings, with uncertainties.

    Start with `layerlot demo`, or write a stack file with `layerlot template stack`, then `layerlot fit`. The release
    of a lot stays with the responsible engineer.
    """


@layerlot.command(short_help="Run the whole job on the shipped, invented lot.")
@click.option(
    "--out", type=_FILE, default=Path("layerlot-demo"), show_default=True, help="Folder for inputs and reports."
)
@click.option(
    "--workers", type=click.IntRange(1), default=None, help="Processes; as many as there are cores if left out."
)
def demo(out: Path, workers: int | None) -> int:
    """Run the whole job on the shipped, invented lot and say where the report is."""
    from .command_fit import run_demo

    return run_demo(out, workers)


@layerlot.command(short_help="Write a blank stack file or workbook to fill in.")
@click.argument("kind", type=click.Choice(["prism", "guide", "stack"]))
@click.option("--out", type=_FILE, default=None, help="File to write; a name that goes with the kind if left out.")
def template(kind: str, out: Path | None) -> int:
    """Write a blank to fill in: `stack` and `guide` are stack files, `prism` is a workbook for coupling angles."""
    from .command_template import write_template

    return write_template(kind, out)


@layerlot.command(short_help="Say what was recognised in each file; fit nothing.")
@click.argument("files", nargs=-1, required=True, type=_FILE)
def inspect(files: tuple[Path, ...]) -> int:
    """Say what was recognised in each FILE: headings, columns, units, rows kept, rows refused and why. Fits nothing."""
    from .importers import describe, read_tables

    imported = read_tables(list(files))
    click.echo(describe(imported), nl=False)
    if not imported.faults:
        return OK
    if sys.stdout.isatty() and sys.stderr.isatty():
        return REFUSED  # the description has just listed the faults on the same screen
    return _refuse(imported.faults)


@layerlot.command(cls=_ManyNumbers, short_help="Predict film modes, coupling angles and guides.")
@click.argument("stack", type=_FILE)
@click.option(
    "--wavelength-nm",
    type=float,
    multiple=True,
    help="Wavelengths, as many as wanted; those of the file's tables if left out.",
)
@click.option("--pol", type=click.Choice(["TE", "TM"]), default=None, help="One polarisation; both if left out.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output.")
@click.option("--plain-eim", is_flag=True, help="Guides by the effective index method alone: quick and rough.")
@click.option("--field", type=_FILE, default=None, help="Draw the guides' mode fields into this svg, png or pdf file.")
def predict(
    stack: Path,
    wavelength_nm: tuple[float, ...],
    pol: str | None,
    as_json: bool,
    plain_eim: bool,
    field: Path | None,
) -> int:
    """Film modes, coupling angles, guides and sensitivities of a STACK file whose quantities have values or starts.

    Guides are those of the file's structures, each at its own polarisation: effective and group index, and what width,
    thickness, etch, wall, index and temperature do to them and to a resonance.
    """
    from .command_predict import run_predict

    return run_predict(stack, wavelength_nm, pol, as_json, plain_eim, field)


@layerlot.command(short_help="Fit film index and thickness of every site.")
@click.argument("stack", type=_FILE)
@click.argument("data", nargs=-1, required=True, type=_FILE)
@click.option("--out", type=_FILE, required=True, help="Folder for results.json, results.xlsx and report.html.")
@click.option(
    "--workers", type=click.IntRange(1), default=None, help="Processes; as many as there are cores if left out."
)
@click.option("--json", "as_json", is_flag=True, help="Print results.json on standard output and nothing else.")
def fit(stack: Path, data: tuple[Path, ...], out: Path, workers: int | None, as_json: bool) -> int:
    """Fit film index and thickness of every site in the DATA tables, as the STACK file asks.

    Ctrl-C stops after the running sites and keeps what is done; a second Ctrl-C stops at once and writes nothing.
    """
    from .command_fit import run_fit

    return run_fit(stack, data, out, workers, as_json)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command; returns its exit status. Whatever goes wrong is told in lines on standard error."""
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a console without ± or µ still gets its answers
    try:
        status = layerlot.main(
            None if arguments is None else list(arguments), prog_name="layerlot", standalone_mode=False
        )
        return int(status or OK)
    except (Exception, KeyboardInterrupt) as error:
        return _status_of(error)


def _status_of(error: BaseException) -> int:
    """Tell what went wrong; returns the exit status that goes with it."""
    from .records import InputRefused

    if isinstance(error, InputRefused):
        return _refuse(error.faults)
    if isinstance(error, click.UsageError):
        return _refuse([_usage(error)])
    if isinstance(error, (KeyboardInterrupt, click.Abort)):
        click.echo("Stopped; nothing was written.", err=True)
        return FLAGGED
    if isinstance(error, BrokenPipeError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())  # the reader of our output has left
        return FLAGGED
    if os.environ.get(SHOW_TRACEBACK):
        raise error
    click.echo(f"The program, not the input, is at fault ({type(error).__name__}: {error}).", err=True)
    click.echo(f"Nothing was written. Run again with {SHOW_TRACEBACK}=1 set and report what it prints.", err=True)
    return BROKEN


def _usage(error: click.UsageError) -> Fault:
    from .records import Fault, Place

    name = error.ctx.command_path if error.ctx is not None else "layerlot"
    told = error.format_message().rstrip(".")
    was = told[0].lower() + told[1:]
    return Fault(Place("command line"), was, "a complete and known command is required", f"see {name} --help")


def _refuse(faults: Sequence[Fault]) -> int:
    for fault in faults:
        click.echo(str(fault), err=True)
    return REFUSED


if __name__ == "__main__":
    sys.exit(main())
