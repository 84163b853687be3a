"""Doors to the outside world: a reference library, open data and published examples."""

from __future__ import annotations

import importlib
import json
import os
import warnings
from pathlib import Path
from typing import Any

import pytest

__all__ = ["import_samplics", "open_data", "published"]

_PUBLISHED = Path(__file__).parents[1] / "fixtures" / "published"


def import_samplics() -> Any:
    """Import samplics, an archived library used as an independent check only, or skip.

    On import it warns that it is archived: that one warning is silenced, and no other. Under CI a
    missing library is a failure, so that the check cannot fall away unseen.
    """
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "samplics is archived", FutureWarning)
        if os.environ.get("CI"):
            return importlib.import_module("samplics")
        return pytest.importorskip("samplics", reason="the extra `check` is not installed")


def open_data(name: str) -> Path:
    """Path of an open data file in the folder that SVYRATES_OPEN_DATA names, or skip.

    A folder that is named but lacks the file is a failure: somebody meant the test to run.
    """
    folder = os.environ.get("SVYRATES_OPEN_DATA")
    if not folder:
        pytest.skip("SVYRATES_OPEN_DATA names no folder with the open data set")
    path = Path(folder) / name
    if not path.is_file():
        pytest.fail(f"SVYRATES_OPEN_DATA names {folder}, which holds no {name}")
    return path


def published(name: str) -> Any:
    """Read a published worked example, with its source, from fixtures/published."""
    return json.loads((_PUBLISHED / f"{name}.json").read_text(encoding="utf-8"))
