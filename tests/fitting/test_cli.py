"""The commands from the outside: exit status, what is printed where, what is written, and what never is."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from layerlot.fitting.cli import main
from layerlot.fitting.command_fit import DEMO_DATA, DEMO_STACK
from layerlot.fitting.inverse import table
from layerlot.fitting.report import write
from layerlot.fitting.report.write import FILES
from layerlot.fitting.stack import load_stack

from tests.fitting.stack_cases import CASES, GOOD, edited

# Coupling angles of an invented nitride film, 2.0 and 500 nm, on fused silica under GOOD's prism, worked out with
# tests/reference/field_model.py and rounded to 0.001 degrees.
ROWS = "site,wavelength_nm,pol,mode,angle_deg\n" + "".join(
    f"{site},632.8,{pol},{mode},{angle + 0.002 * (site - 1):.3f}\n"
    for site in (1, 2)
    for pol, mode, angle in (("TE", 0, 6.445), ("TE", 1, -14.856), ("TM", 0, 4.084), ("TM", 1, -21.734))
)


class Folder:
    """A working folder with a good stack file and a good table."""

    def __init__(self, path: Path) -> None:
        self.path, self.out = path, path / "out"
        self.stack, self.data = path / "wafer.toml", path / "readings.csv"
        self.stack.write_text(GOOD, encoding="utf-8")
        self.data.write_text(ROWS, encoding="utf-8")

    def fit(self, *more: str) -> int:
        return main(["fit", str(self.stack), str(self.data), "--out", str(self.out), "--workers", "1", *more])

    def names(self) -> set[str]:
        return {p.name for p in self.path.iterdir()}


@pytest.fixture
def folder(tmp_path: Path) -> Folder:
    return Folder(tmp_path)


def python(*arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, *arguments], capture_output=True, text=True, check=False, cwd=cwd)


def test_help_loads_nothing_heavy() -> None:
    """`layerlot --help` answers without numpy, pydantic, scipy or anything else that takes time to load."""
    code = """
import sys
from layerlot.fitting.cli import main
status = main(["--help"])
heavy = {"numpy", "scipy", "pydantic", "lmfit", "matplotlib", "openpyxl", "rich", "jinja2"} & set(sys.modules)
sys.exit(f"loaded {heavy}" if heavy else status)
"""
    done = python("-c", code)
    assert (done.returncode, done.stderr) == (0, "")
    assert all(word in done.stdout for word in ("demo", "template", "inspect", "predict", "fit"))


def test_runs_as_a_module() -> None:
    """`python -m layerlot.fitting.cli` is the command, and says its version."""
    done = python("-m", "layerlot.fitting.cli", "--version")
    assert (done.returncode, done.stdout.split()[0]) == (0, "layerlot")


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["fitt"], "command line: no such command 'fitt'"),
        (["fit", "a.toml", "b.csv"], "command line: missing option '--out'"),
        (["fit"], "command line: missing argument 'STACK'"),
        (["predict", "a.toml", "--pol", "XY"], "command line: invalid value for '--pol'"),
        (["predict", "a.toml", "--wavelength-nm", "red"], "command line: invalid value for '--wavelength-nm'"),
        (["template", "wafer"], "command line: invalid value for '{prism|guide|stack}'"),
    ],
)
def test_wrong_command_line(capsys: pytest.CaptureFixture[str], arguments: list[str], told: str) -> None:
    """A command line that cannot be followed is one line on standard error and exit status 2."""
    assert main(arguments) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert err.startswith(told)
    assert err.rstrip().endswith("--help")


@pytest.mark.parametrize("name", CASES)
def test_faulty_stack_file(folder: Folder, capsys: pytest.CaptureFixture[str], name: str) -> None:
    """Each fault of a stack file ends `fit` with status 2, its one line on standard error, and no output folder."""
    folder.stack.write_text(edited(name), encoding="utf-8")
    before = folder.names()
    assert folder.fit() == 2
    assert capsys.readouterr() == ("", f"{folder.stack}: {CASES[name][2]}\n")
    assert folder.names() == before


def test_all_inputs_are_judged_together(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """Faults of stack file, table and output folder come in one go."""
    folder.stack.write_text(edited("window upside down"), encoding="utf-8")
    folder.data.write_text(ROWS.replace("TE,0,", "TE,0,six"), encoding="utf-8")
    folder.out.write_text("a file")
    assert folder.fit() == 2
    out, err = capsys.readouterr()
    assert out == ""
    lines = err.splitlines()
    told = list(dict.fromkeys(line.split(": ")[0] for line in lines))
    assert told == [str(folder.stack), str(folder.out), str(folder.data)]
    assert lines[1] == f"{folder.out}: a file, a folder is required, name a folder with --out"


@pytest.mark.parametrize("missing", ["stack", "data"])
def test_missing_file(folder: Folder, capsys: pytest.CaptureFixture[str], missing: str) -> None:
    """A path to nothing is refused with the path, and nothing is made."""
    path: Path = getattr(folder, missing)
    path.unlink()
    assert folder.fit() == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith(f"{path}: ")
    assert not folder.out.exists()


def test_foreign_folder_is_left_alone(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """A folder that holds something else, or a results.json of another program, is refused and untouched."""
    folder.out.mkdir()
    for name, text in (("notes.txt", "mine"), ("results.json", '{"schema": "other/1"}'), ("results.json", "[")):
        for old in folder.out.iterdir():
            old.unlink()
        (folder.out / name).write_text(text)
        assert folder.fit() == 2
        told = "a folder that holds 1 other file, a new or empty folder, or one with an earlier fit, is required"
        assert told in capsys.readouterr().err
        assert [(p.name, p.read_text()) for p in folder.out.iterdir()] == [(name, text)]


def test_fit_writes_three_files_and_a_second_fit_renews_them(
    folder: Folder, capsys: pytest.CaptureFixture[str]
) -> None:
    """A fit leaves its three files and nothing else; the same folder takes the next fit, a foreign file in it stays."""
    assert folder.fit() == 0
    out, err = capsys.readouterr()
    assert "2 sites: 2 good" in out
    assert out.rstrip().endswith(f"Report: {folder.out / 'report.html'}")
    assert err == ""
    assert {p.name for p in folder.out.iterdir()} == set(FILES)
    assert folder.names() == {"wafer.toml", "readings.csv", "out"}
    (folder.out / "notes.txt").write_text("mine")
    first = json.loads((folder.out / "results.json").read_text())
    folder.data.write_text(ROWS.replace("2,632.8", "3,632.8"), encoding="utf-8")
    assert folder.fit() == 0
    second = json.loads((folder.out / "results.json").read_text())
    assert [s["site"] for s in first["sites"]] == ["1", "2"]
    assert [s["site"] for s in second["sites"]] == ["1", "3"]
    assert (folder.out / "notes.txt").read_text() == "mine"


def test_fit_finds_the_film(folder: Folder) -> None:
    """The film that the table was worked out from (2.0, 500 nm) comes back within its expanded uncertainty."""
    assert folder.fit() == 0
    site = json.loads((folder.out / "results.json").read_text())["sites"][0]
    found = {e["quantity"]: e for e in site["estimates"] if e["layer"] == "core"}
    for quantity, truth in (("index", 2.0), ("thickness", 500.0)):
        e = found[quantity]
        assert abs(e["value"] - truth) < 2 * e["u"], e


def test_inputs_are_named_with_their_hashes(folder: Folder) -> None:
    """results.json names stack file and table, each with the SHA-256 of its bytes."""
    import hashlib

    folder.fit()
    inputs = json.loads((folder.out / "results.json").read_text())["inputs"]
    assert [(i["file"], i["sha256"]) for i in inputs] == [
        (str(p), hashlib.sha256(p.read_bytes()).hexdigest()) for p in (folder.stack, folder.data)
    ]


def test_json_is_the_document_and_nothing_else(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """With --json, standard output is results.json."""
    assert folder.fit("--json") == 0
    out, err = capsys.readouterr()
    assert (out, err) == ((folder.out / "results.json").read_text(encoding="utf-8"), "")
    assert json.loads(out)["schema"] == "layerlot/results/1"


def test_flagged_site_is_status_one(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """A site that cannot be determined gives status 1; the good one is written."""
    one_mode = "".join(line for line in ROWS.splitlines(keepends=True) if not line.startswith("2,") or "TE,0" in line)
    folder.data.write_text(one_mode, encoding="utf-8")
    assert folder.fit() == 1
    sites = json.loads((folder.out / "results.json").read_text())["sites"]
    assert [s["status"] == "ok" for s in sites] == [True, False]
    assert sites[1]["flags"]
    capsys.readouterr()


def test_nothing_half_written(
    folder: Folder, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """If writing fails midway there is no output folder and nothing beside it; the fault is told in one line."""

    def broken(result: object, out_dir: Path) -> None:
        (out_dir / "results.json").write_text("{")
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(write, "write_reports", broken)
    before = folder.names()
    assert folder.fit() == 2
    assert capsys.readouterr() == (
        "",
        f"{folder.out}: cannot be written (No space left on device), room and rights are required, "
        "name another folder\n",
    )
    assert folder.names() == before


def test_fault_of_the_program_is_told_in_words(
    folder: Folder, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """An error of our own is status 3 and two lines, a traceback only where it is asked for."""

    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("in the fit")

    monkeypatch.setattr("layerlot.fitting.inverse.fit_table", broken)
    assert folder.fit() == 3
    out, err = capsys.readouterr()
    assert (out, err.count("\n"), folder.out.exists()) == ("", 2, False)
    assert "ZeroDivisionError: in the fit" in err
    monkeypatch.setenv("LAYERLOT_TRACEBACK", "1")
    with pytest.raises(ZeroDivisionError):
        folder.fit()


def interrupting(times: int) -> Callable[..., object]:
    """fit_table with Ctrl-C pressed, `times` over, when it first asks whether to stop."""
    real = table.fit_table

    def fit_table(*arguments: object, should_stop: Callable[[], bool], **rest: object) -> object:
        presses = [times]

        def pressed() -> bool:
            while presses[0]:
                presses[0] -= 1
                signal.raise_signal(signal.SIGINT)
            return should_stop()

        return real(*arguments, should_stop=pressed, **rest)  # type: ignore[arg-type]

    return fit_table


def many_sites() -> str:
    head, *rows = ROWS.splitlines()
    one = [row.partition(",")[2] for row in rows[:4]]
    return "\n".join([head, *(f"{site},{row}" for site in range(1, 41) for row in one)]) + "\n"


def test_one_interrupt_keeps_what_is_done(
    folder: Folder, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """After one Ctrl-C the running sites are finished and written, the rest marked as not fitted; status 1."""
    folder.data.write_text(many_sites(), encoding="utf-8")
    monkeypatch.setattr("layerlot.fitting.inverse.fit_table", interrupting(1))
    handler = signal.getsignal(signal.SIGINT)
    assert folder.fit() == 1
    assert "Stopping after the running sites; what is done is kept." in capsys.readouterr().err
    document = json.loads((folder.out / "results.json").read_text())
    assert document["interrupted"] is True
    codes = [[f["code"] for f in s["flags"]] for s in document["sites"]]
    assert len(codes) == 40
    assert 0 < codes.count([]) < 40
    assert codes.count(["interrupted"]) == 40 - codes.count([])
    assert signal.getsignal(signal.SIGINT) is handler


def test_two_interrupts_write_nothing(
    folder: Folder, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """A second Ctrl-C stops at once: no folder, one line, status 1."""
    monkeypatch.setattr("layerlot.fitting.inverse.fit_table", interrupting(2))
    assert folder.fit() == 1
    assert capsys.readouterr().err.endswith("Stopped; nothing was written.\n")
    assert not folder.out.exists()


def test_no_progress_off_a_terminal(folder: Folder) -> None:
    """In a pipe, standard error stays empty and standard output carries no control codes."""
    done = python("-m", "layerlot.fitting.cli", "fit", "wafer.toml", "readings.csv", "--out", "out", cwd=folder.path)
    assert (done.returncode, done.stderr) == (0, "")
    assert "\x1b" not in done.stdout


@pytest.mark.parametrize("kind", ["stack", "guide"])
def test_blank_stack_file_is_a_good_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], kind: str
) -> None:
    """The blank stack files load as they are and can be predicted from; `guide` has a guide and its structures."""
    monkeypatch.chdir(tmp_path)
    assert main(["template", kind]) == 0
    assert capsys.readouterr().out.startswith(f"Written: {kind}.toml\n")
    stack = load_stack(Path(f"{kind}.toml"))
    assert (stack.guide is not None, len(stack.structures)) == ((True, 2) if kind == "guide" else (False, 0))
    assert main(["predict", f"{kind}.toml", "--plain-eim"]) == 0


def test_blank_workbook_is_read(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The blank workbook for coupling angles is written, and `inspect` recognises it."""
    path = tmp_path / "mine.xlsx"
    assert main(["template", "prism", "--out", str(path)]) == 0
    main(["inspect", str(path)])
    assert "angle" in capsys.readouterr().out


def test_templates_overwrite_nothing(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """An existing file, another kind's ending and a folder that is not there are refused."""
    path = tmp_path / "wafer.toml"
    path.write_text("mine")
    assert main(["template", "stack", "--out", str(path)]) == 2
    assert main(["template", "prism", "--out", str(tmp_path / "p.csv")]) == 2
    assert main(["template", "stack", "--out", str(tmp_path / "no" / "w.toml")]) == 2
    lines = capsys.readouterr().err.splitlines()
    assert lines[0] == f"{path}: a file that exists, nothing is written over, name another file with --out"
    assert lines[1].endswith("a file ending in .csv, this blank is a .xlsx file, name it with .xlsx")
    assert lines[2].endswith(
        "cannot be written (No such file or directory), an existing folder is required, check the path"
    )
    assert path.read_text() == "mine"


def test_inspect_says_what_was_recognised(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """`inspect` prints readings and columns, and is satisfied with a good table."""
    assert main(["inspect", str(folder.data)]) == 0
    out, err = capsys.readouterr()
    assert out.startswith("8 readings of 2 sites in 1 table of 1 file.")
    assert err == ""


def test_inspect_of_a_faulty_table(folder: Folder, capsys: pytest.CaptureFixture[str]) -> None:
    """A table that a fit would refuse gives status 2, the description, and its faults on standard error."""
    folder.data.write_text(ROWS.replace("TE,0,", "TE,0,six"), encoding="utf-8")
    assert main(["inspect", str(folder.data)]) == 2
    out, err = capsys.readouterr()
    assert "A fit would be refused" in out
    assert err.startswith(f"{folder.data}: row 2/column")


def test_demo_answers(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The demo fits the shipped lot, says that it is invented, prints answers and the report's place; again is fine."""
    out = tmp_path / "demo"
    assert main(["demo", "--out", str(out)]) == 0
    text = capsys.readouterr().out
    assert text.startswith("The shipped lot is invented")
    assert "45 sites" in text
    assert f"Report: {out / 'report.html'}" in text
    assert {p.name for p in out.iterdir()} == {*FILES, DEMO_STACK, DEMO_DATA}
    (out / DEMO_STACK).write_text(GOOD)
    assert main(["demo", "--out", str(out)]) == 2
    assert "a file that was changed" in capsys.readouterr().err
    assert (out / DEMO_STACK).read_text() == GOOD
