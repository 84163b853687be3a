"""The rules of the house that no single module can hold."""

from __future__ import annotations

import ast
import inspect
import re
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any

import pytest

import svyrates

ROOT = Path(__file__).parents[1]
PACKAGE = ROOT / "svyrates"
MODULES = sorted(PACKAGE.rglob("*.py"))
PROJECT: dict[str, Any] = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))

TOP_LEVEL = {
    "DEVELOPERS.md",
    "README.md",
    "docs",
    "fixtures",
    "pyproject.toml",
    "svyrates",
    "tests",
}

LEAVES = ("errors", "words")
DATA_FLOW = ("design", "tally", "totals", "rates", "compare", "publish", "command")

# About 400 lines are what a reader holds in mind. The slack spares a file from being cut in two
# for the sake of a docstring.
LONGEST = 420


def _name(path: Path) -> str:
    return path.relative_to(ROOT).as_posix()


def _imports(path: Path) -> set[str]:
    """Every module that a file imports, at its top or inside a function, for types or for use."""
    package = path.relative_to(ROOT).parent.parts
    found: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            above = package[: len(package) - node.level + 1] if node.level else ()
            module = ".".join((*above, *filter(None, [node.module])))
            # `from svyrates import rates` may name a module or something in one.
            found |= {f"{module}.{alias.name}" for alias in node.names}
    return found


def _rooms(path: Path) -> set[str]:
    """List the rooms of the package that a file imports from; the door itself is no room."""
    own = [name.split(".") for name in _imports(path) if name.split(".")[0] == "svyrates"]
    return {parts[1] if len(parts) > 1 else "the door" for parts in own}


def _allowed(room: str) -> set[str]:
    """Rooms that a room may import from: itself, the leaves, and what lies before it."""
    if room in LEAVES:
        return {room}
    if room == "demo":
        return {"demo", "errors"}
    earlier = {*LEAVES, *DATA_FLOW[: DATA_FLOW.index(room) + 1]}
    return earlier | {"demo", "__version__"} if room == "command" else earlier


def test_imports_run_one_way() -> None:
    for path in MODULES:
        room = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
        if room not in ("__init__", "__main__"):
            assert room in {*LEAVES, *DATA_FLOW, "demo"}, _name(path)
            assert _rooms(path) <= _allowed(room), _name(path)


def test_package_is_light_to_import() -> None:
    """scipy.stats takes longer to import than all the rest; scipy.special has what is needed."""
    assert not [
        _name(path)
        for path in MODULES
        if any(name.startswith("scipy.stats") for name in _imports(path))
    ]


def test_every_import_is_declared() -> None:
    extras = PROJECT["project"]["optional-dependencies"]
    required = [*PROJECT["project"]["dependencies"], *extras["parquet"], *extras["figures"]]
    declared = {re.split(r"[^\w-]", requirement)[0] for requirement in required}
    imported = {name.split(".")[0] for path in MODULES for name in _imports(path)}
    assert imported - {*sys.stdlib_module_names, "svyrates"} <= declared


def test_extra_all_is_all() -> None:
    extras = dict(PROJECT["project"]["optional-dependencies"])
    (everything,) = extras.pop("all")
    assert everything == f"svyrates[{','.join(extras)}]"


def test_version_has_one_source() -> None:
    assert "version" in PROJECT["project"]["dynamic"]
    source = (ROOT / PROJECT["tool"]["hatch"]["version"]["path"]).read_text(encoding="utf-8")
    assert f'__version__ = "{svyrates.__version__}"' in source
    changelog = (ROOT / "docs" / "changelog.md").read_text(encoding="utf-8")
    newest = re.search(r"^## (\S+)", changelog, re.MULTILINE)
    assert newest is not None
    assert newest[1] == svyrates.__version__


def test_top_level_holds_what_it_should() -> None:
    if (ROOT / ".git").exists():
        # What git ignores, such as a demo folder, is not part of the project.
        command = ["git", "ls-files", "--cached", "--others", "--exclude-standard"]
        listed = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=True)
        files = [name for name in listed.stdout.splitlines() if (ROOT / name).exists()]
        names = {name.split("/")[0] for name in files}
    else:
        names = {path.name for path in ROOT.iterdir()}
    assert {name for name in names if not name.startswith(".")} == TOP_LEVEL


def test_no_file_is_too_long() -> None:
    files = [*MODULES, *(ROOT / "tests").rglob("*.py"), ROOT / "docs" / "conf.py"]
    lengths = {_name(path): len(path.read_text(encoding="utf-8").splitlines()) for path in files}
    assert {name: length for name, length in lengths.items() if length > LONGEST} == {}


def _documented() -> list[str]:
    """Public functions and classes; an exception says all in its docstring, a constant has none."""
    public = {name: getattr(svyrates, name) for name in svyrates.__all__}
    return [
        name
        for name, thing in public.items()
        if callable(thing) and not (inspect.isclass(thing) and issubclass(thing, BaseException))
    ]


@pytest.mark.parametrize("name", _documented())
def test_public_name_has_an_example(name: str) -> None:
    text = inspect.getdoc(getattr(svyrates, name)) or ""
    heading, _, example = text.partition("Examples\n--------\n")
    assert heading.strip()
    assert ">>> " in example


def test_every_public_thing_has_a_docstring() -> None:
    public = {name: getattr(svyrates, name) for name in svyrates.__all__}
    methods = {
        f"{owner}.{name}": getattr(thing, name)
        for owner, thing in public.items()
        if inspect.isclass(thing)
        for name in vars(thing)
        if not name.startswith("_") and callable(getattr(thing, name))
    }
    assert [name for name, thing in (public | methods).items() if not inspect.getdoc(thing)] == []


def test_public_names_are_plain_words() -> None:
    """Only the package itself bears the first three letters of its name."""
    assert not [name for name in svyrates.__all__ if name.lower().startswith("svy")]


def test_api_page_lists_the_public_names() -> None:
    page = (ROOT / "docs" / "api.md").read_text(encoding="utf-8")
    assert sorted(re.findall(r"^   (\w+)$", page, re.MULTILINE)) == sorted(svyrates.__all__)


@pytest.mark.parametrize("name", ["demo", "tests"])
def test_readme_command_is_one_line_that_ci_runs(name: str) -> None:
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    assert len(re.findall(rf"^<!-- ci: {name} -->\n```bash\n.+\n```$", readme, re.MULTILINE)) == 1
    assert f"readme_command {name}" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")
