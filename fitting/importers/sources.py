"""Files into grids: whether they exist, what they really are, how large they are, and their SHA-256.

| content                               | becomes                                  |
|---------------------------------------|------------------------------------------|
| zip with a workbook, named xlsx, xlsm | one grid a sheet                         |
| text named csv, tsv, txt (also .gz)   | one grid                                 |
| anything else                         | a fault that says what it is             |
"""

from __future__ import annotations

import gzip
import hashlib
import zlib
from pathlib import Path

from ..records import InputFile, Place
from .grid import Findings, Grid
from .textfile import read_text
from .workbook import LIMIT_MB, read_workbook

WORKBOOKS = (".xlsx", ".xlsm")
TEXTS = (".csv", ".tsv", ".txt")
_LIMIT = LIMIT_MB * 1_000_000
_REQUIRED = "xlsx, csv, tsv or txt (the text ones also as gz) is required"


def read_source(path: Path, findings: Findings) -> tuple[list[Grid], InputFile | None]:
    """The grids of one file and its fingerprint; faults go to `findings`, nothing is raised for bad content."""
    name = str(path)
    data = _bytes(path, name, findings)
    if data is None:
        return [], None
    source = InputFile(name, hashlib.sha256(data).hexdigest())
    if not data:
        findings.fault(Place(name), "the file is empty", "a table of readings is required", "check the export")
        return [], source
    suffix = path.suffix.casefold()
    if suffix == ".gz":
        suffix = Path(path.stem).suffix.casefold()
        unpacked = _gunzip(name, data, findings)
        if unpacked is None:
            return [], source
        data = unpacked
        if suffix not in TEXTS:
            findings.fault(
                Place(name), f"a gz file of '{suffix or 'no ending'}'", _REQUIRED, "unpack it and name it by what it is"
            )
            return [], source
    return _grids(name, suffix, data, findings), source


def _bytes(path: Path, name: str, findings: Findings) -> bytes | None:
    try:
        if path.is_dir():
            findings.fault(Place(name), "a folder", "a file is required", "name the files in it")
            return None
        size = path.stat().st_size
        if size > _LIMIT:
            findings.fault(
                Place(name),
                f"the file has {size / 1e6:.0f} MB",
                f"at most {LIMIT_MB} MB is required",
                "keep the readings only, or split it by lot",
            )
            return None
        return path.read_bytes()
    except FileNotFoundError:
        findings.fault(
            Place(name), "there is no such file", "an existing file is required", "check the name and the folder"
        )
    except OSError as error:
        findings.fault(
            Place(name),
            f"the file cannot be opened ({error.strerror})",
            "a readable file is required",
            "close it elsewhere or check its rights",
        )
    return None


def _gunzip(name: str, data: bytes, findings: Findings) -> bytes | None:
    import io

    try:
        with gzip.GzipFile(fileobj=io.BytesIO(data)) as packed:
            unpacked = packed.read(_LIMIT + 1)
    except (OSError, EOFError, zlib.error) as error:
        findings.fault(
            Place(name), f"the gz file is damaged ({error})", "a whole gz file is required", "copy or pack it again"
        )
        return None
    if len(unpacked) > _LIMIT:
        findings.fault(
            Place(name),
            f"the file unpacks to more than {LIMIT_MB} MB",
            f"at most {LIMIT_MB} MB is required",
            "keep the readings only, or split it by lot",
        )
        return None
    return unpacked


def _grids(name: str, suffix: str, data: bytes, findings: Findings) -> list[Grid]:
    is_zip, is_ole = data.startswith(b"PK\x03\x04"), data.startswith(b"\xd0\xcf\x11\xe0")
    if is_ole:
        was = "an encrypted workbook or one in the old xls format"
        remedy = "open it, take the password off and save it as xlsx"
    elif suffix in WORKBOOKS and is_zip:
        return read_workbook(name, data, findings)
    elif suffix in TEXTS and not is_zip:
        if data.startswith(b"\x1f\x8b"):
            was, remedy = f"a gz file named {suffix}", f"name it {suffix}.gz"
        elif data.startswith(b"%PDF"):
            was, remedy = f"a PDF named {suffix}", "export the table itself"
        else:
            return read_text(name, data, findings)
    elif suffix in WORKBOOKS:
        was, remedy = (
            f"not a workbook although named {suffix} (text or another format)",
            "name it .csv if it is text, else save it as xlsx",
        )
    elif suffix in TEXTS:
        was, remedy = f"a workbook or zip archive named {suffix}", "name it .xlsx if it is a workbook, else unpack it"
    else:
        was, remedy = f"a file ending in '{suffix or 'nothing'}'", "save the table as xlsx or csv"
    findings.fault(Place(name), was, _REQUIRED, remedy)
    return []
