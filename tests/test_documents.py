"""README.md, DEVELOPERS.md and the pages of docs/ do what they show.

Code blocks of a document run from top to bottom in one namespace and one empty folder:

* `python`: runs. If a `text` block follows, it shows exactly what the code prints, a warning being
  printed as `Category: message`. A warning that no `text` block shows is an error.
* `pycon`: a doctest.
* `console`: each line that starts with `$ svyrates` runs, and the lines below it are what it
  prints; with none below it need only succeed. It must fail where `Error:` is shown.

In what is shown, `...` stands for anything. Other languages are for the reader only, and so
is a block below the comment `<!-- not run: REASON -->`.
"""

from __future__ import annotations

import contextlib
import doctest
import io
import os
import re
import shlex
import subprocess
import sys
import warnings
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

import svyrates
from svyrates import RatesWarning

ROOT = Path(__file__).parents[1]
RUN = ("python", "pycon", "console")
FENCE = re.compile(
    r"(?:^<!--\s*not run:\s*(?P<reason>\S.*?)\s*-->\n+)?"
    r"^(?P<fence>```+)(?P<language>[\w-]+)\n(?P<body>.*?)^(?P=fence)\s*?$",
    re.MULTILINE | re.DOTALL,
)


@dataclass(frozen=True)
class Block:
    """A fenced block: where its body starts, and the text shown directly below it, if any."""

    language: str
    body: str
    line: int
    shown: str | None


def blocks_of(text: str) -> list[Block]:
    """List the blocks that run, in order."""
    found = list(FENCE.finditer(text))
    blocks = []
    for number, match in enumerate(found):
        if match["language"] not in RUN or match["reason"]:
            continue
        following = found[number + 1] if number + 1 < len(found) else None
        shown = None
        if following is not None and following["language"] == "text":
            between = text[match.end() : following.start("fence")]
            shown = following["body"] if not between.strip() else None
        line = text.count("\n", 0, match.start("body")) + 1
        blocks.append(Block(match["language"], match["body"], line, shown))
    return blocks


def run_document(text: str, name: str) -> None:
    """Run every block of a document in the current folder; fail where it shows something else."""
    namespace: dict[str, Any] = {"__name__": "__main__"}
    with warnings.catch_warnings():
        # A filter that a block sets holds for those below it, as it does for the reader.
        warnings.simplefilter("error")
        warnings.simplefilter("always", RatesWarning)
        _run_blocks(text, name, namespace)


def _run_blocks(text: str, name: str, namespace: dict[str, Any]) -> None:
    for block in blocks_of(text):
        where = f"{name}:{block.line}"
        if block.language == "python":
            printed, warned = _run_python(block, name, namespace)
            if block.shown is not None:
                _compare(block.shown, printed, where)
            elif warned:
                pytest.fail(f"{where}: a warning is not shown:\n{printed}")
        elif block.language == "pycon":
            _run_doctest(block, name, namespace)
        else:
            for command, shown in _commands(block.body):
                _run_command(command, shown, where)


def _run_python(block: Block, name: str, namespace: dict[str, Any]) -> tuple[str, bool]:
    warned = False

    def show(message: Warning | str, category: type[Warning], *_: object, **__: object) -> None:
        nonlocal warned
        warned = True
        print(f"{category.__name__}: {message}")  # noqa: T201 - into the captured output

    printed = io.StringIO()
    # Blank lines above make a traceback name the line of the document.
    code = compile("\n" * (block.line - 1) + block.body, name, "exec")
    with contextlib.redirect_stdout(printed):
        warnings.showwarning = show
        exec(code, namespace)  # noqa: S102 - the document is ours
    return printed.getvalue(), warned


def _run_doctest(block: Block, name: str, namespace: dict[str, Any]) -> None:
    report = io.StringIO()
    test = doctest.DocTestParser().get_doctest(block.body, namespace, name, name, block.line - 1)
    test.globs = namespace  # not a copy: later blocks see its names
    runner = doctest.DocTestRunner(optionflags=doctest.ELLIPSIS)
    if runner.run(test, out=report.write, clear_globs=False).failed:
        pytest.fail(report.getvalue())


def _commands(body: str) -> Iterator[tuple[str, str]]:
    """Each command of a console block, its continued lines joined, with what is shown below it."""
    for part in re.split(r"^\$ ", body, flags=re.MULTILINE)[1:]:
        command, _, shown = part.replace("\\\n", " ").partition("\n")
        yield command, shown


def _run_command(command: str, shown: str, where: str) -> None:
    program, *arguments = shlex.split(command)
    if program != "svyrates":
        pytest.fail(f"{where}: `console` blocks are for svyrates; show `{program}` as `bash`")
    done = subprocess.run(
        [sys.executable, "-m", "svyrates", *arguments],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        encoding="utf-8",
        env={
            **os.environ,
            "COLUMNS": "80",
            "PYTHONIOENCODING": "utf-8",
            "PYTHONPATH": str(Path(svyrates.__file__).parents[1]),
            "PYTHONUNBUFFERED": "1",  # tables and warnings keep their order in the one stream
        },
        check=False,
    )
    if bool(done.returncode) != shown.startswith("Error:"):
        pytest.fail(f"{where}: `{command}` ended with {done.returncode}:\n{done.stdout}")
    if shown.strip():
        _compare(shown, done.stdout, where)


def _compare(shown: str, printed: str, where: str) -> None:
    shown, printed = _tidy(shown), _tidy(printed)
    if not doctest.OutputChecker().check_output(shown, printed, doctest.ELLIPSIS):
        pytest.fail(f"{where}: shown is\n{shown}\nprinted was\n{printed}")


def _tidy(text: str) -> str:
    return "\n".join(line.rstrip() for line in text.strip("\n").splitlines()) + "\n"


def _documents() -> list[str]:
    pages = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted((ROOT / "docs").glob("*.md"))]
    return [
        str(page.relative_to(ROOT))
        for page in pages
        if page.exists() and blocks_of(page.read_text(encoding="utf-8"))
    ]


@pytest.mark.parametrize("name", _documents())
def test_document_does_what_it_shows(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    run_document((ROOT / name).read_text(encoding="utf-8"), name)


WARN = "import warnings, svyrates\nwarnings.warn('look', svyrates.DesignWarning)\n"


@pytest.mark.parametrize(
    "document",
    [
        "```python\nprint(6 * 7)\n```\n\n```text\n42\n```\n",
        "```python\nfor i in range(9):\n    print(i)\n```\n```text\n0\n...\n8\n```\n",
        "```python\na = 1\n```\nThen\n```pycon\n>>> a + 1\n2\n>>> b = 3\n```\n```python\nb\n```\n",
        f"```python\n{WARN}```\n\n```text\nDesignWarning: look\n```\n",
        "```bash\nexit 1\n```\n",
        "<!-- not run: its file is the reader's own -->\n```python\nopen('no')\n```\n",
        "```console\n$ svyrates --version\nsvyrates ...\n$ svyrates --help\n```\n",
        "```console\n$ svyrates compare no.csv --outcome y\nError: ...\n```\n",
    ],
)
def test_true_document_passes(
    document: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    run_document(document, "page.md")


@pytest.mark.parametrize(
    ("document", "message"),
    [
        ("```python\nprint(6 * 7)\n```\n\n```text\n43\n```\n", r"page.md:2: shown is\n43"),
        ("Text\n\n```pycon\n>>> 6 * 7\n43\n```\n", r'"page.md", line 4'),
        (f"```python\n{WARN}```\n", "a warning is not shown:\nDesignWarning: look"),
        ("```console\n$ svyrates --version\nsvyrates 0.0\n```\n", "shown is\nsvyrates 0.0"),
        ("```console\n$ svyrates compare no.csv --outcome y\n```\n", "ended with 2"),
        ("```console\n$ svyrates --version\nError: no\n```\n", "ended with 0"),
        ("```console\n$ rm -r x\n```\n", "show `rm` as `bash`"),
    ],
)
def test_untrue_document_fails(
    document: str, message: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(pytest.fail.Exception, match=message):
        run_document(document, "page.md")


def test_foreign_warning_is_an_error() -> None:
    document = "```python\nimport warnings\nwarnings.warn('old', DeprecationWarning)\n```\n"
    with pytest.raises(DeprecationWarning, match="old"):
        run_document(document, "page.md")
