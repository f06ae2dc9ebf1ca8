"""Correction maps on disk: found again, rebuilt when damaged or stale, safe with two processes at once."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np
import pytest
from layerlot.fitting.observables import map_store
from layerlot.solver.correction import BendRatio, CorrectionMap
from layerlot.solver.map_build import MapGoal
from layerlot.solver.map_window import MapWindow, index_points_um, map_window


def window(width: float = 1.0) -> MapWindow:
    waves = index_points_um(1.5, 1.6)
    low, high = (width, 0.4, 0, 90, 0, 1.5), (width, 0.4, 0, 90, 0, 1.6)
    return map_window(low, high, np.tile([1.444, 1.996, 1.444], (waves.size, 1)), [0.4], 1, True, False)


def made(for_window: MapWindow) -> CorrectionMap:
    """A map with made-up numbers: only what is kept and found again matters here."""
    table = np.arange(48.0).reshape(8, 6, 1) / 7
    return CorrectionMap(for_window, 5, table, 1e-6, 1e-4, (8e-7, 9e-5), (6e-7, 4e-5), (5, 12, 0), True)


@pytest.fixture
def builds(monkeypatch, tmp_path):
    """The cache in a folder of its own, and a builder that only counts."""
    calls: list[MapWindow] = []

    def build(for_window: MapWindow, *_: object) -> CorrectionMap:
        calls.append(for_window)
        return made(for_window)

    monkeypatch.setenv(map_store.FOLDER_VARIABLE, str(tmp_path / "cache"))
    monkeypatch.setattr(map_store, "build_map", build)
    return calls


def same(one: CorrectionMap, other: CorrectionMap) -> bool:
    names = ("degree", "error", "group_error", "held_error", "reference_error", "nodes", "met")
    return np.array_equal(one.table, other.table) and all(getattr(one, n) == getattr(other, n) for n in names)


def the_file(folder: Path) -> Path:
    (found,) = folder.glob("cache/map-*.npz")
    return found


def test_built_once(builds):
    """The second call finds what the first one kept, every number the same."""
    first, second = map_store.stored_map(window()), map_store.stored_map(window())
    assert len(builds) == 1
    assert same(first, second)


@pytest.mark.parametrize(
    "change", ["width", "goal", "version", "solver"], ids=["window", "goal", "program version", "solver source"]
)
def test_everything_it_depends_on_is_in_the_key(builds, monkeypatch, change):
    """Another window, goal, program version or solver is another map."""
    map_store.stored_map(window())
    goal = None
    if change == "version":
        monkeypatch.setattr(map_store, "version", lambda name: f"{name} next")
    if change == "solver":
        monkeypatch.setattr(map_store, "_solver_digest", lambda: "another")
    if change == "goal":
        goal = MapGoal(index=1e-6)
    map_store.stored_map(window(1.1 if change == "width" else 1.0), goal)
    assert len(builds) == 2


@pytest.mark.parametrize("damage", ["empty", "truncated", "flipped", "text", "foreign"])
def test_a_damaged_file_is_rebuilt(builds, tmp_path, damage):
    """A file that is empty, cut short, altered, no archive or of another window is replaced by a good one."""
    good = map_store.stored_map(window())
    path = the_file(tmp_path)
    content = path.read_bytes()
    if damage == "foreign":
        other = made(window(1.2))
        map_store._write(path, map_store._key(window(1.2), {"goal": asdict(MapGoal())}), replace(other, error=0.5))
    else:
        middle = content.index(b"table.npy") + 200
        path.write_bytes(
            {
                "empty": b"",
                "truncated": content[: len(content) // 2],
                "flipped": content[:middle] + bytes([content[middle] ^ 1]) + content[middle + 1 :],
                "text": b"no map at all",
            }[damage]
        )
    assert same(map_store.stored_map(window()), good)
    assert len(builds) == 2
    assert same(map_store.stored_map(window()), good)
    assert len(builds) == 2


def test_numbers_are_held_to_their_digest(builds, tmp_path):
    """A file of sound form whose numbers were changed is not believed."""
    map_store.stored_map(window())
    path = the_file(tmp_path)
    with np.load(path) as held:
        meta, table = held["meta"], held["table"] * 1.001
    np.savez(path, meta=meta, table=table)
    assert same(map_store.stored_map(window()), made(window()))
    assert len(builds) == 2


def test_a_folder_that_cannot_be_written_costs_only_the_cache(builds, monkeypatch, tmp_path):
    """Where the cache folder cannot be made the map is built all the same."""
    (tmp_path / "file").write_text("in the way")
    monkeypatch.setenv(map_store.FOLDER_VARIABLE, str(tmp_path / "file" / "cache"))
    assert same(map_store.stored_map(window()), made(window()))


def test_bends_are_kept_beside(builds, monkeypatch):
    """The ratio for bends has a file of its own: it is built once, and the map is not built again for it."""
    made_bends: list[MapWindow] = []

    def build(for_window: MapWindow, *_: object) -> BendRatio:
        made_bends.append(for_window)
        return BendRatio(1, np.full((1, 2, 1), 0.7), 0.01, 25.0)

    monkeypatch.setattr(map_store, "build_bend", build)
    assert map_store.stored_map(window()).bend is None
    found = [map_store.stored_map(window(), bends=True).bend for _ in range(2)]
    assert len(builds) == len(made_bends) == 1
    assert found[0] is not None and found[1] is not None and found[0].error == found[1].error == 0.01
    assert np.array_equal(found[0].table, found[1].table)


def test_nothing_else_is_left_behind(builds, tmp_path):
    """The folder holds the map and its lock, no half-written file."""
    map_store.stored_map(window())
    assert {p.suffix for p in (tmp_path / "cache").iterdir()} <= {".npz", ".lock"}
    assert len(list((tmp_path / "cache").glob("*.npz"))) == 1


_SLOW = """
import sys, time
sys.path[:0] = sys.argv[1:3]
from layerlot.fitting.observables import map_store
from tests.fitting.test_map_store import made, same, window

def build(for_window, *_):
    with open(sys.argv[3], "a") as log:
        log.write("built\\n")
    time.sleep(1.5)
    return made(for_window)

map_store.build_map = build
assert same(map_store.stored_map(window()), made(window()))
"""


def test_two_processes_at_once(tmp_path, monkeypatch):
    """Two processes that want one map build it once: the second waits and finds it."""
    monkeypatch.setenv(map_store.FOLDER_VARIABLE, str(tmp_path / "cache"))
    log = tmp_path / "log"
    root = str(Path(__file__).parents[2])
    command = [sys.executable, "-c", _SLOW, root, root, str(log)]
    runs = [subprocess.Popen(command, stderr=subprocess.PIPE, text=True) for _ in range(2)]
    for run in runs:
        _, errors = run.communicate(timeout=60)
        assert run.returncode == 0, errors
    assert log.read_text() == "built\n"


def test_folder_by_default(monkeypatch, tmp_path):
    """Without the variable maps lie in the user's cache folder, under the program's name."""
    monkeypatch.delenv(map_store.FOLDER_VARIABLE, raising=False)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert map_store.cache_folder() == tmp_path / "layerlot"
