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
from dataclasses import asdict
from functools import cache
from importlib.metadata import version
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np
from layerlot.solver.correction import CorrectionMap, MapGoal, build_map
from layerlot.solver.map_nodes import Progress
from layerlot.solver.map_window import MapWindow
from layerlot.solver.vector_modes import FINE

FOLDER_VARIABLE = "LAYERLOT_CACHE"
_FORMAT = 1


def cache_folder() -> Path:
    """Where maps are kept: the folder that LAYERLOT_CACHE names, else `layerlot` in the user's cache folder."""
    named = os.environ.get(FOLDER_VARIABLE)
    if named:
        return Path(named)
    base = os.environ.get("XDG_CACHE_HOME") or (os.environ.get("LOCALAPPDATA") if os.name == "nt" else None)
    return (Path(base) if base else Path.home() / ".cache") / "layerlot"


def stored_map(
    window: MapWindow, goal: MapGoal | None = None, workers: int | None = None, progress: Progress | None = None
) -> CorrectionMap:
    """The map of a window: from the cache, or built and kept there. A cache that cannot be written is done without.
    Raises MapError where no map can be made."""
    from filelock import FileLock

    target = MapGoal() if goal is None else goal
    key = _key(window, target)
    path = cache_folder() / f"map-{hashlib.sha256(key.encode()).hexdigest()[:32]}.npz"
    found = _read(path, key, window)
    if found is not None:
        return found
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        lock = FileLock(path.with_suffix(".lock"))
        lock.acquire()
    except OSError:
        return build_map(window, target, workers, progress)
    try:
        found = _read(path, key, window)  # another process may have been at it
        if found is None:
            found = build_map(window, target, workers, progress)
            _write(path, key, found)
        return found
    finally:
        lock.release()


def _key(window: MapWindow, goal: MapGoal) -> str:
    plain = {
        name: value.tolist() if isinstance(value, np.ndarray) else value for name, value in asdict(window).items()
    }
    return json.dumps(
        {
            "format": _FORMAT,
            "window": plain,
            "goal": asdict(goal),
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


def _read(path: Path, key: str, window: MapWindow) -> CorrectionMap | None:
    """The map in a file; None where there is none, or what is there is damaged or another's."""
    import zipfile
    import zlib

    try:
        # numpy leaves a file that it opened itself open when it turns out damaged
        with path.open("rb") as file, np.load(file, allow_pickle=False) as held:
            text, table = str(held["meta"]), np.array(held["table"])
        meta = json.loads(text)
        if meta["key"] != key or meta["digest"] != _digest(meta["numbers"], table):
            return None
        return CorrectionMap(window=window, table=table, **_numbers(meta["numbers"]))
    except (OSError, EOFError, ValueError, KeyError, TypeError, NotImplementedError, zipfile.BadZipFile, zlib.error):
        return None


def _numbers(stored: dict[str, Any]) -> dict[str, Any]:
    return {name: tuple(value) if isinstance(value, list) else value for name, value in stored.items()}


def _digest(numbers: dict[str, Any], table: np.ndarray[Any, Any]) -> str:
    text = json.dumps([numbers, list(table.shape), str(table.dtype)], sort_keys=True)
    return hashlib.sha256(text.encode() + table.tobytes()).hexdigest()


def _write(path: Path, key: str, made: CorrectionMap) -> None:
    """Keep a map. A disk that is full or may not be written costs the cache, not the result."""
    names = ("degree", "error", "group_error", "held_error", "reference_error", "nodes", "met")
    numbers = json.loads(json.dumps({name: getattr(made, name) for name in names}))
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
