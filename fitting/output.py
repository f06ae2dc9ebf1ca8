"""The output folder of a fit: checked before the work, written beside, moved into place when all of it is there."""

from __future__ import annotations

import json
import os
import shutil
import tempfile
from collections.abc import Callable, Collection
from pathlib import Path

from .records import Fault, Place

RESULTS = "results.json"
_SCHEMA = "layerlot/results/"


def folder_faults(out: Path, also_ours: Collection[str] = ()) -> list[Fault]:
    """Why `out` cannot take results. New, empty, or holding an earlier fit's results is fine; `also_ours` names
    files that may stand in it besides. Nothing foreign is ever overwritten."""
    place = Place(str(out))
    if out.is_dir():
        held = {p.name for p in out.iterdir()}
        if held <= set(also_ours) or _is_earlier_fit(out / RESULTS):
            return []
        was = f"a folder that holds {len(held)} other file{'s' if len(held) > 1 else ''}"
        required = "a new or empty folder, or one with an earlier fit, is required"
        return [Fault(place, was, required, "name another folder with --out")]
    if out.exists() or out.is_symlink():
        return [Fault(place, "a file", "a folder is required", "name a folder with --out")]
    ancestor = next(p for p in [*out.absolute().parents] if p.exists())
    if not ancestor.is_dir() or not os.access(ancestor, os.W_OK):
        was = f"cannot be made in {ancestor}"
        return [Fault(place, was, "a folder that may be written is required", "name another folder with --out")]
    return []


def _is_earlier_fit(path: Path) -> bool:
    """Whether a file is a results.json of this program. One that cannot be read or parsed is not."""
    try:
        document = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(document, dict) and str(document.get("schema", "")).startswith(_SCHEMA)


def write_folder(out: Path, write: Callable[[Path], None]) -> None:
    """Let `write` fill an empty folder beside `out`, then move its files into `out`. If `write` raises, `out` is as it
    was. Raises OSError where the disk does."""
    out.absolute().parent.mkdir(parents=True, exist_ok=True)
    beside = Path(tempfile.mkdtemp(prefix=f".{out.name}-", dir=out.absolute().parent))
    try:
        write(beside)
        out.mkdir(exist_ok=True)
        for made in sorted(beside.iterdir()):
            os.replace(made, out / made.name)
    finally:
        shutil.rmtree(beside)
