"""`svyrates run` and `svyrates check`: a plan carried out, or only looked at."""

from __future__ import annotations

import hashlib
import json
import re
import shutil
import tempfile
import unicodedata
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, cast

import pandas as pd
import typer

from svyrates.command.answer import answer
from svyrates.command.compare import screen_width
from svyrates.command.plan import Plan, Question, read_plan
from svyrates.design import SampleDesign
from svyrates.design.columns import ColumnFault, code_column, open_frame
from svyrates.errors import DataFileError, FigureError, RatesError
from svyrates.publish import (
    Answer,
    ReportFacts,
    build_report,
    draw_against_simple,
    draw_rates,
    svg_of,
)
from svyrates.words import Tabular, count, for_terminal, plural, progress_bar

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["SOME_FAILED", "check_plan", "run_plan"]

SOME_FAILED = 3
SCHEMA = 1
_WRITERS = {"csv": "csv", "json": "json", "markdown": "md", "latex": "tex", "html": "html"}


def run_plan(path: Path, out: Path | None) -> int:
    """Carry out a plan; the exit code says whether every question has an answer."""
    plan = read_plan(path)
    folder = _folder(plan, out)
    data, design = _read(plan)
    answers: list[tuple[Question, Answer]] = []
    failed: list[tuple[str, str]] = []
    total = len(plan.questions)
    with progress_bar("Questions", total, worth=total > 3) as progress:
        for question in plan.questions:
            try:
                answers.append((question, answer(plan, question, data, design)))
            except RatesError as problem:
                failed.append((question.title, str(problem)))
            progress(1)
    content, remarks = _content(plan, design, len(data), answers, failed)
    _write(folder, content)
    _tell(plan, answers, failed, [*remarks, f"{plural(len(content), 'file')} in {folder}"])
    return SOME_FAILED if failed else 0


def _read(plan: Plan) -> tuple[pd.DataFrame, SampleDesign]:
    """The columns of the plan; all of them where some are not there, to name near ones."""
    columns = plan.columns()
    data, design = plan.survey.read(columns, may_lack=True)
    if set(columns) - set(map(str, data.columns)):
        return plan.survey.read([*columns, "*"], may_lack=True)
    return data, design


def _tell(
    plan: Plan,
    answers: list[tuple[Question, Answer]],
    failed: list[tuple[str, str]],
    remarks: list[str],
) -> None:
    typer.echo(for_terminal(plan.title) + "\n")
    for question, found in answers:
        gaps = found.comparisons
        said = "no comparison" if gaps is None else plural(len(gaps), "comparison")
        typer.echo(for_terminal(f"{question.title}: {said}"))
    for title, message in failed:
        lines = [for_terminal(line) for line in message.splitlines()]
        typer.echo(f"No answer to {for_terminal(title)}: " + "\n  ".join(lines), err=True)
    typer.echo("")
    for remark in remarks:
        typer.echo(for_terminal(remark))


def check_plan(path: Path) -> None:
    """Read the plan and the data, and say what is in them; nothing is estimated."""
    plan = read_plan(path)
    data, design = _read(plan)
    typer.echo(design.summary().text(screen_width()) + "\n")
    frame, faults = open_frame(data), []
    for question in plan.questions:
        typer.echo(for_terminal(question.title))
        for role, name in [("outcome", question.outcome), *[("by", each) for each in question.by]]:
            try:
                coded = code_column(frame, name, role)
            except ColumnFault as fault:
                faults.append(f"{question.title}: {fault}")
                continue
            sizes = pd.Series(coded.codes).value_counts()
            levels = [f"{level} {count(sizes.get(i, 0))}" for i, level in enumerate(coded.levels)]
            missing = f"; missing {count(sizes.get(-1, 0))}" if -1 in sizes.index else ""
            listed = ", ".join(levels[:12]) + (", …" if len(levels) > 12 else "")
            typer.echo(for_terminal(f"  {role} {name}: {listed}{missing}"))
    if faults:
        raise DataFileError("The plan cannot be run:\n" + "\n".join(f"- {x}" for x in faults))
    typer.echo("\nThe plan can be run.")


def _folder(plan: Plan, out: Path | None) -> Path:
    """Where results go: inside the plan's own folder, unless the command line says otherwise."""
    if out is not None:
        return out
    home = plan.path.parent.resolve()
    folder = (home / plan.folder).resolve()
    if Path(plan.folder).is_absolute() or not folder.is_relative_to(home) or folder == home:
        raise DataFileError(
            f"{plan.path}: output folder {plan.folder!r} must be a folder inside that of the plan; "
            "name another place with --out."
        )
    return folder


def _content(
    plan: Plan,
    design: SampleDesign,
    n_records: int,
    answers: list[tuple[Question, Answer]],
    failed: list[tuple[str, str]],
) -> tuple[dict[str, bytes], list[str]]:
    """Every file's name and content, and what must be said of them."""
    content: dict[str, bytes] = {}
    remarks: list[str] = []
    everything = []
    for number, (question, found) in enumerate(answers, start=1):
        name = f"{number:02d}-{_slug(question.title)}"
        tables = list(_tables(found))
        for kind, table in tables:
            for form in plan.tables:
                text = getattr(_laid_out(table, plan, form), form)()
                content[f"{name}-{kind}.{_WRITERS[form]}"] = _bytes(text)
        everything.append(
            {
                "title": question.title,
                "notes": list(found.notes),
                "tables": {
                    kind: json.loads(table.table(every_column=True).json())
                    for kind, table in tables
                },
            }
        )
        try:
            for kind, form, picture in _pictures(found, plan):
                content[f"{name}-{kind}.{form}"] = picture
        except FigureError as problem:
            remarks.append(f"{question.title}: no figure: {problem}")
    digest = hashlib.sha256(plan.survey.file.read_bytes()).hexdigest()
    whole = {
        "schema": SCHEMA,
        "title": plan.title,
        "data": {"file": plan.survey.file.name, "sha256": digest, "records": n_records},
        "questions": everything,
        "failed": [{"title": title, "message": message} for title, message in failed],
    }
    text = json.dumps(whole, ensure_ascii=False, allow_nan=False, indent=1) + "\n"
    content["results.json"] = _bytes(text)
    if plan.report:
        facts = ReportFacts(
            plan.title, design.summary(), plan.survey.file.name, digest, n_records, plan.text,
            tuple(failed),
        )  # fmt: skip
        page = build_report(facts, [found for _, found in answers], percent=plan.percent)
        content["report.html"] = _bytes(page)
    return content, list(dict.fromkeys(remarks))


def _bytes(text: str) -> bytes:
    return text.encode("utf-8", "backslashreplace")


def _laid_out(table: Tabular, plan: Plan, form: str) -> Any:
    for_machines = form in ("csv", "json")
    return table.table(percent=plan.percent and not for_machines, every_column=for_machines)


def _tables(found: Answer) -> Iterator[tuple[str, Tabular]]:
    yield "rates", found.rates
    if found.comparisons is not None:
        yield "comparisons", found.comparisons
    for number, other in enumerate(found.others, start=1):
        kind = re.sub(r"(?<=[a-z])(?=[A-Z])", "-", type(other).__name__.removesuffix("Table"))
        yield f"{number}-{kind.lower()}", other


def _pictures(found: Answer, plan: Plan) -> Iterator[tuple[str, str, bytes]]:
    from io import BytesIO

    if not plan.figures:
        return
    drawn = {"rates": draw_rates(found.rates, percent=plan.percent)}
    gaps = found.comparisons
    if gaps is not None and (gaps.estimate == gaps.estimate).any():
        drawn["against-simple"] = draw_against_simple(gaps)
    for kind, axes in drawn.items():
        for form in plan.figures:
            if form == "svg":
                yield kind, form, _bytes(svg_of(axes))
                continue
            buffer = BytesIO()
            # Neither the date nor the version of the library belongs to the picture.
            figure = cast("Figure", axes.get_figure(root=True))
            figure.savefig(buffer, format="png", dpi=200, metadata={"Software": None})
            yield kind, form, buffer.getvalue()


def _slug(title: str) -> str:
    """A file name of plain letters and digits, whatever the title holds."""
    plain = unicodedata.normalize("NFKD", title).encode("ascii", "ignore").decode().lower()
    return re.sub(r"[^a-z0-9]+", "-", plain).strip("-")[:40].strip("-") or "question"


def _write(folder: Path, content: dict[str, bytes]) -> None:
    """Write all files beside, then move them, so that a broken run leaves old results whole."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        beside = Path(tempfile.mkdtemp(prefix=".results-", dir=folder))
        try:
            for name, data in content.items():
                (beside / name).write_bytes(data)
            for name in content:
                (beside / name).replace(folder / name)
        finally:
            shutil.rmtree(beside, ignore_errors=True)
    except OSError as problem:
        raise DataFileError(f"{folder}: cannot be written ({problem.strerror}).") from problem
