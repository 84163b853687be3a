"""`svyrates`: the commands, their options, and the one place where errors become exit codes."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Annotated, Any

import typer

from svyrates.errors import RatesError

__all__ = ["app", "main"]

app = typer.Typer(
    name="svyrates",
    help="Compare proportions between groups of survey respondents, with the design taken into "
    "account, and see where the simple formula would mislead.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

Names = list[str] | None


def main(arguments: list[str] | None = None) -> None:
    """Run the command line; every error ends in a plain message and an exit code.

    Parameters
    ----------
    arguments : list of str, optional
        The process's own by default.
    """
    try:
        app(args=arguments, standalone_mode=True)
    except RatesError as problem:
        _fail(str(problem), 2)
    except BrokenPipeError:
        # The reader of our output has left, as `head` does.
        sys.stderr.close()
        sys.exit(0)
    except (OSError, MemoryError) as problem:
        _fail(f"{type(problem).__name__}: {getattr(problem, 'strerror', None) or problem}", 2)
    except Exception as problem:  # noqa: BLE001 - a traceback could show microdata
        trace = problem.__traceback__
        while trace is not None and trace.tb_next is not None:
            trace = trace.tb_next
        where = (
            f"{Path(trace.tb_frame.f_code.co_filename).name}:{trace.tb_lineno}" if trace else "?"
        )
        _fail(f"internal error: {type(problem).__name__} at {where}. Please report it.", 1)


def _fail(message: str, code: int) -> None:
    from svyrates.words import for_terminal

    lines = [for_terminal(line) for line in message.splitlines()]
    sys.stderr.write("Error: " + "\n".join(lines) + "\n")
    sys.exit(code)


def _version(wanted: bool) -> None:
    if wanted:
        from svyrates import __version__

        typer.echo(f"svyrates {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Show the version.")
    ] = False,
) -> None:
    """Compare proportions between groups of survey respondents."""


@app.command()
def demo(
    out: Annotated[
        Path, typer.Option(help="Folder for the data and the tables; made if need be.")
    ] = Path("svyrates-demo"),
) -> None:
    """Run the main job on an invented survey and keep its tables."""
    from svyrates.command.demo import run_demo

    run_demo(out)


@app.command()
def compare(
    file: Annotated[Path, typer.Argument(help="CSV (also compressed), Parquet or XPORT file.")],
    outcome: Annotated[list[str], typer.Option(help="Outcome column; may be repeated.")],
    by: Annotated[Names, typer.Option(help="Grouping column; repeat it to cross several.")] = None,
    success: Annotated[
        Names, typer.Option(help="Answer that counts as success; may be repeated.")
    ] = None,
    weight: Annotated[str | None, typer.Option(help="Column of sampling weights.")] = None,
    weight_decimals: Annotated[int, typer.Option(help="Implied decimals of the weight.")] = 0,
    strata: Annotated[Names, typer.Option(help="Stratum column; repeat it to cross.")] = None,
    clusters: Annotated[
        Names, typer.Option(help="Sampling-unit column; repeat it for later stages.")
    ] = None,
    population: Annotated[
        Names, typer.Option(help="Column with the population of units; repeat it per stage.")
    ] = None,
    single_cluster_strata: Annotated[
        str, typer.Option(help="error, collapse, grand-mean or self-representing.")
    ] = "error",
    replicates: Annotated[
        Names,
        typer.Option(help="Replicate weights: a pattern such as 'rw_*', or columns; repeatable."),
    ] = None,
    scheme: Annotated[
        str | None,
        typer.Option(
            help="How the replicates were made: delete-one-jackknife, stratified-jackknife, "
            "paired-jackknife, balanced-repeated-replication, fay, bootstrap, "
            "successive-difference or coefficients."
        ),
    ] = None,
    fay: Annotated[float | None, typer.Option(help="Fay's factor k in [0, 1).")] = None,
    units_per_stratum: Annotated[
        list[int] | None,
        typer.Option(help="Stratified jackknife: units in the stratum of each replicate."),
    ] = None,
    both_halves: Annotated[
        bool, typer.Option("--both-halves", help="Paired jackknife with two replicates a pair.")
    ] = False,
    mean_size: Annotated[int, typer.Option(help="Mean bootstrap: replicates in each mean.")] = 1,
    coefficient: Annotated[
        list[float] | None,
        typer.Option(help="For --scheme coefficients: one, or one for each replicate."),
    ] = None,
    centre: Annotated[
        str, typer.Option(help="Centre of the replicates: full-sample or replicate-mean.")
    ] = "full-sample",
    factors: Annotated[
        bool, typer.Option("--factors", help="Replicates are factors that multiply the weight.")
    ] = False,
    replicate_decimals: Annotated[
        int, typer.Option(help="Implied decimals of the replicates.")
    ] = 0,
    replicate_file: Annotated[
        Path | None, typer.Option(help="File that holds the replicates, merged on --key.")
    ] = None,
    key: Annotated[
        Names, typer.Option(help="Key column of both files; repeat it for several.")
    ] = None,
    where: Annotated[
        Names,
        typer.Option(
            help="Subpopulation: a 0/1 column, or COLUMN=VALUE or COLUMN=VALUE,VALUE; "
            "repeat it to narrow further."
        ),
    ] = None,
    versus: Annotated[
        str | None,
        typer.Option(help="A group, 'everyone', 'everyone else', or a proportion such as 0.25."),
    ] = None,
    within: Annotated[
        Names, typer.Option(help="Grouping column to hold fixed; may be repeated.")
    ] = None,
    measure: Annotated[
        str, typer.Option(help="difference, ratio, odds_ratio or relative_difference.")
    ] = "difference",
    alternative: Annotated[
        str,
        typer.Option(help="two-sided, greater, less, equivalent, not-lower or not-higher."),
    ] = "two-sided",
    null: Annotated[
        float | None, typer.Option(help="Value of the measure under the null hypothesis.")
    ] = None,
    margin: Annotated[
        list[float] | None,
        typer.Option(help="For the last three alternatives; give it twice for two ends."),
    ] = None,
    multiplicity: Annotated[
        str,
        typer.Option(
            help="none, bonferroni, sidak, holm, hochberg, benjamini-hochberg, "
            "benjamini-yekutieli or max-t."
        ),
    ] = "none",
    family: Annotated[
        str, typer.Option(help="Adjust the comparisons of each level together, or of the table.")
    ] = "level",
    limits: Annotated[str, typer.Option(help="linear or recovered.")] = "linear",
    simple: Annotated[
        str, typer.Option(help="unweighted, weighted, weights-as-counts or kish.")
    ] = "unweighted",
    interval: Annotated[
        str,
        typer.Option(
            help="korn-graubard, wilson, logit, wald, arcsine, jeffreys or agresti-coull."
        ),
    ] = "korn-graubard",
    level: Annotated[float, typer.Option(help="Confidence level.")] = 0.95,
    df: Annotated[
        str | None, typer.Option(help="domain, design, satterthwaite, or a number.")
    ] = None,
    out: Annotated[
        list[Path] | None,
        typer.Option(help="Write the comparisons to a .csv or .json file; may be repeated."),
    ] = None,
    out_rates: Annotated[
        list[Path] | None,
        typer.Option(help="Write the rates to a .csv or .json file; may be repeated."),
    ] = None,
    percent: Annotated[bool, typer.Option("--percent", help="Show percentages.")] = False,
    explain: Annotated[
        bool, typer.Option("--explain", help="Put every comparison into words.")
    ] = False,
    separator: Annotated[str | None, typer.Option(help="Separator of a CSV file.")] = None,
    encoding: Annotated[str, typer.Option(help="Encoding of text in the file.")] = "utf-8",
) -> None:
    """Compare an outcome's rate between the groups of a survey file."""
    settings: dict[str, Any] = dict(locals())
    from svyrates.command.compare import run_compare
    from svyrates.command.survey import SurveyFile

    names = SurveyFile.__dataclass_fields__
    survey = SurveyFile(**{name: value for name, value in settings.items() if name in names})
    run_compare(survey, **{name: value for name, value in settings.items() if name not in names})


@app.command()
def run(
    plan: Annotated[Path, typer.Argument(help="A plan: a TOML file.")],
    out: Annotated[
        Path | None, typer.Option(help="Folder for the results, instead of the plan's own.")
    ] = None,
) -> None:
    """Carry out a plan: tables, figures and a report.

    A question that fails does not stop the others; the exit status is then 3.
    """
    from svyrates.command.plan_run import run_plan

    code = run_plan(plan, out)
    if code:
        raise typer.Exit(code)


@app.command()
def check(plan: Annotated[Path, typer.Argument(help="A plan: a TOML file.")]) -> None:
    """Check a plan, its design and its data.

    Nothing is estimated and nothing is written.
    """
    from svyrates.command.plan_run import check_plan

    check_plan(plan)


@app.command("plan")
def first_plan(
    file: Annotated[Path, typer.Argument(help="CSV (also compressed), Parquet or XPORT file.")],
    out: Annotated[Path, typer.Option(help="Where to write the plan.")] = Path("plan.toml"),
    replace: Annotated[bool, typer.Option("--replace", help="Write over a plan.")] = False,
    separator: Annotated[str | None, typer.Option(help="Separator of a CSV file.")] = None,
    encoding: Annotated[str, typer.Option(help="Encoding of text in the file.")] = "utf-8",
) -> None:
    """Write a first plan for a data file.

    Weight, strata, clusters, replicates, outcomes and groups are guessed from names and values, and
    every guess is marked as one.
    """
    from svyrates.command.plan_guess import guess_plan

    guess_plan(file, out, replace=replace, separator=separator, encoding=encoding)
