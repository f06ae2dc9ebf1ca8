"""Correction maps on disk: built once for a window, found again by everything they depend on.

A file is named by the hash of its key: the window, the goal, the mesh rule, the program's and the finite-element
library's version, and the text of the solver itself. It is taken only if it holds that very key and its numbers match
their own digest; any other file is rebuilt. Files are written beside and moved into place; a lock keeps two processes
from doing the same work twice, and neither can see half a file.
"""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
from collections.abc import Callable
from dataclasses import asdict, replace
from functools import cache
from importlib.metadata import version
from importlib.resources import files
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
from layerlot.solver.correction import BendRatio, CorrectionMap
from layerlot.solver.map_build import MapGoal, build_bend, build_map
from layerlot.solver.map_nodes import Progress
from layerlot.solver.map_window import MapWindow
from layerlot.solver.vector_modes import FINE

from ..records import Array

FOLDER_VARIABLE = "LAYERLOT_CACHE"
_FORMAT = 1
# Fields that are kept beside the table.
_KEPT: dict[type, tuple[str, ...]] = {
    CorrectionMap: ("degree", "error", "group_error", "held_error", "reference_error", "nodes", "met"),
    BendRatio: ("degree", "error", "radius_um"),
}
Made = TypeVar("Made", CorrectionMap, BendRatio)


def cache_folder() -> Path:
    """Where maps are kept: the folder that LAYERLOT_CACHE names, else `layerlot` in the user's cache folder."""
    named = os.environ.get(FOLDER_VARIABLE)
    if named:
        return Path(named)
    base = os.environ.get("XDG_CACHE_HOME") or (os.environ.get("LOCALAPPDATA") if os.name == "nt" else None)
    return (Path(base) if base else Path.home() / ".cache") / "layerlot"


def stored_map(
    window: MapWindow,
    goal: MapGoal | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
    bends: bool = False,
) -> CorrectionMap:
    """The map of a window: from the cache, or built and kept there. bends: whether bent guides are asked for, for
    which a ratio comes with it. A cache that cannot be written is done without. Raises MapError where no map
    can be made."""
    target = MapGoal() if goal is None else goal
    made = _stored(
        _key(window, {"goal": asdict(target)}),
        lambda: build_map(window, target, workers, progress),
        lambda numbers, table: CorrectionMap(window=window, table=table, **numbers),
    )
    if not bends:
        return made
    bend = _stored(
        _key(window, {"bend": True}),
        lambda: build_bend(window, workers, progress),
        lambda numbers, table: BendRatio(table=table, **numbers),
    )
    return replace(made, bend=bend)


def _stored(key: str, build: Callable[[], Made], remake: Callable[[dict[str, Any], Array], Made]) -> Made:
    """What the key stands for: from its file, or built and kept."""
    from filelock import FileLock

    path = cache_folder() / f"map-{hashlib.sha256(key.encode()).hexdigest()[:32]}.npz"
    found = _read(path, key)
    if found is not None:
        return remake(*found)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        lock = FileLock(path.with_suffix(".lock"))
        lock.acquire()
    except OSError:
        return build()
    try:
        found = _read(path, key)  # another process may have been at it
        if found is not None:
            return remake(*found)
        made = build()
        _write(path, key, made)
        return made
    finally:
        lock.release()


def _key(window: MapWindow, purpose: dict[str, Any]) -> str:
    plain = {name: value.tolist() if isinstance(value, np.ndarray) else value for name, value in asdict(window).items()}
    return json.dumps(
        {
            "format": _FORMAT,
            "window": plain,
            **purpose,
            "mesh": asdict(FINE),
            "versions": [version("layerlot"), version("scikit-fem")],
            "solver": _solver_digest(),
        },
        sort_keys=True,
    )


@cache
def _solver_digest() -> str:
    """Hash of the solver's source: a map made by another solver is no map of this one."""
    digest = hashlib.sha256()
    for source in sorted(files("layerlot.solver").iterdir(), key=lambda p: p.name):
        if source.name.endswith(".py"):
            digest.update(source.name.encode() + b"\0" + source.read_bytes())
    return digest.hexdigest()


def _read(path: Path, key: str) -> tuple[dict[str, Any], Array] | None:
    """Numbers and table of a file; None where there is none, or what is there is damaged or another's."""
    import zipfile
    import zlib

    try:
        # numpy leaves a file that it opened itself open when it turns out damaged
        with path.open("rb") as file, np.load(file, allow_pickle=False) as held:
            text, table = str(held["meta"]), np.array(held["table"])
        meta = json.loads(text)
        if meta["key"] != key or meta["digest"] != _digest(meta["numbers"], table):
            return None
        numbers = {name: tuple(x) if isinstance(x, list) else x for name, x in meta["numbers"].items()}
        return numbers, table
    except (OSError, EOFError, ValueError, KeyError, TypeError, NotImplementedError, zipfile.BadZipFile, zlib.error):
        return None


def _digest(numbers: dict[str, Any], table: Array) -> str:
    text = json.dumps([numbers, list(table.shape), str(table.dtype)], sort_keys=True)
    return hashlib.sha256(text.encode() + table.tobytes()).hexdigest()


def _write(path: Path, key: str, made: CorrectionMap | BendRatio) -> None:
    """Keep a map. A disk that is full or may not be written costs the cache, not the result."""
    numbers = json.loads(json.dumps({name: getattr(made, name) for name in _KEPT[type(made)]}))
    meta = json.dumps({"key": key, "digest": _digest(numbers, made.table), "numbers": numbers})
    try:
        handle, beside = tempfile.mkstemp(prefix=".map-", suffix=".npz", dir=path.parent)
    except OSError:
        return
    try:
        with os.fdopen(handle, "wb") as out:
            np.savez(out, meta=np.array(meta), table=made.table)
        os.replace(beside, path)
    except OSError:
        Path(beside).unlink(missing_ok=True)
