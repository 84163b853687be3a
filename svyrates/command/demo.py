"""`svyrates demo`: the main job on the invented survey, from data to tables on disk."""

from __future__ import annotations

import warnings
from pathlib import Path

import typer

from svyrates.command.compare import show
from svyrates.command.files import write_table
from svyrates.compare import compare_rates
from svyrates.demo import demo_survey
from svyrates.design import SampleDesign
from svyrates.errors import DataFileError, RatesWarning
from svyrates.rates import estimate_rates

__all__ = ["run_demo"]


def run_demo(folder: Path) -> None:
    """Two questions: who lives in a cold home, and whether park homes are damper."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        survey = demo_survey(wave="2024")
        survey.to_csv(folder / "survey.csv", index=False)
    except OSError as problem:
        raise DataFileError(f"{folder}: cannot be written ({problem.strerror}).") from problem
    typer.echo("The Orrelund Winter Homes Survey 2024 (invented, like all its people).\n")
    design = SampleDesign(survey, weight="wt", strata="district", clusters="block")
    typer.echo(f"{design}\n")
    cold = estimate_rates(design, "cold_home", success=["often", "always"], by="tenure")
    damp = estimate_rates(design, "damp", by="dwelling_type")
    for name, rates in (("cold-home", cold), ("damp", damp)):
        typer.echo(f"{rates}\n")
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always", RatesWarning)
            gaps = compare_rates(rates)
        show(gaps, caught)
        typer.echo("")
        for kind in ("csv", "json"):
            write_table(folder / f"{name}-rates.{kind}", rates.table(every_column=True))
            write_table(folder / f"{name}-comparisons.{kind}", gaps.table(every_column=True))
    typer.echo(
        "Before results leave the house, the data provider's disclosure and release rules come "
        "first.\n"
    )
    typer.echo(f"The data and the tables lie in {folder}:")
    for path in sorted(folder.iterdir()):
        typer.echo(f"  {path.name}")
