"""Material constants, reference tables and the demo scenario."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from importlib.resources import as_file, files
from pathlib import Path


def read_text(name: str) -> str:
    """Text of a file of this folder, `name` relative to it."""
    return files(__name__).joinpath(name).read_text(encoding="utf-8")


@contextmanager
def folder(name: str) -> Iterator[Path]:
    """A folder of this package as a path on disk, for as long as the context lasts."""
    with as_file(files(__name__).joinpath(name)) as path:
        yield path
