"""What a user gets from an installation; .ci/run repeats it with the built wheel."""

from __future__ import annotations

import importlib.metadata
import importlib.resources
import os
import subprocess
import sys
from pathlib import Path

import pytest

import svyrates

pytestmark = pytest.mark.wheel

if not os.environ.get("CI"):
    try:
        importlib.metadata.version("svyrates")
    except importlib.metadata.PackageNotFoundError:
        pytest.skip("svyrates is not installed", allow_module_level=True)


def _python(code: str, folder: Path) -> str:
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        cwd=folder,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def test_types_are_shipped() -> None:
    assert importlib.resources.files("svyrates").joinpath("py.typed").is_file()


def test_metadata_tell_the_version() -> None:
    assert importlib.metadata.version("svyrates") == svyrates.__version__


def test_command_is_installed() -> None:
    (entry,) = importlib.metadata.entry_points(group="console_scripts", name="svyrates")
    assert entry.load() is importlib.import_module("svyrates.command").main


@pytest.mark.parametrize(
    ("module", "heavy"),
    [
        ("svyrates", ["numpy", "pandas", "scipy", "typer"]),
        ("svyrates.command", ["numpy", "pandas", "scipy"]),
        ("svyrates.compare", ["matplotlib", "patsy", "polars", "scipy.stats", "statsmodels"]),
    ],
)
def test_import_brings_in_no_more_than_it_needs(
    module: str, heavy: list[str], tmp_path: Path
) -> None:
    code = f"import sys, {module}; print(*(name for name in {heavy} if name in sys.modules))"
    assert _python(code, tmp_path).split() == []


def test_every_public_name_is_there(tmp_path: Path) -> None:
    code = "import svyrates; print(all(hasattr(svyrates, name) for name in svyrates.__all__))"
    assert _python(code, tmp_path).split() == ["True"]
