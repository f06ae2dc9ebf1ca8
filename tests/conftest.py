"""What every test shares."""

from __future__ import annotations

import os

import pytest
from layerlot.fitting.observables.map_store import FOLDER_VARIABLE


@pytest.fixture(scope="session", autouse=True)
def own_cache(tmp_path_factory):
    """Correction maps of the tests are kept in a folder of the run, not in the user's cache."""
    before = os.environ.get(FOLDER_VARIABLE)
    os.environ[FOLDER_VARIABLE] = str(tmp_path_factory.mktemp("cache"))
    yield
    if before is None:
        del os.environ[FOLDER_VARIABLE]
    else:
        os.environ[FOLDER_VARIABLE] = before
