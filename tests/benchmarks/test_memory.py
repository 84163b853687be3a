"""Memory beyond the user's frame; the same on every machine, so it may be asserted."""

from __future__ import annotations

import tracemalloc
import warnings
from collections.abc import Callable

import numpy as np
import pytest

import svyrates as sr
from tests.benchmarks.speed import (
    design_of,
    first_call,
    replicate_design,
    replicate_rates,
    replicated,
    second_call,
    survey,
    weight_matrix,
)


def _peak(job: Callable[[], object]) -> int:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        job()  # caches and imports are not the job's
        tracemalloc.start()
        try:
            job()
            return tracemalloc.get_traced_memory()[1]
        finally:
            tracemalloc.stop()


def test_bytes_a_record() -> None:
    """At most 48 bytes a record at the peak: no copy of the frame, few columns at a time."""
    n = 400_000
    data = survey(n)
    # The small matrices of a question do not grow with the records.
    fixed = 3_000_000
    assert (_peak(lambda: first_call(data)) - fixed) / n <= 48


@pytest.mark.parametrize("by_rows", [False, True])
@pytest.mark.parametrize("precision", [np.float32, np.float64])
def test_replicates_without_a_copy_of_them(by_rows: bool, precision: type) -> None:
    """Rates take at most a tenth of 80 weights in double precision, whatever the file's type.

    What they take goes with the records, not with the replicates: halving the weights in single
    precision halves the file and not the rest, so that the share of the file itself is double.
    """
    n, count = 200_000, 80
    data = replicated(n, count, by_rows=by_rows, precision=precision)
    matrix = weight_matrix(data)
    assert matrix.dtype == precision
    assert matrix.flags.c_contiguous == by_rows
    design = replicate_design(data)
    assert _peak(lambda: replicate_rates(design)) < 0.1 * n * count * 8


@pytest.mark.parametrize("by_rows", [False, True])
@pytest.mark.parametrize(("precision", "columns"), [(np.float32, 3), (np.float64, 2)])
def test_replicate_design_reads_one_column_at_a_time(
    by_rows: bool, precision: type, columns: int
) -> None:
    """A design of replicates holds the weights, one replicate, and what it was converted from."""
    n = 200_000
    data = replicated(n, by_rows=by_rows, precision=precision)
    # The small matrices of the checks do not grow with the records.
    fixed = 1_000_000
    assert _peak(lambda: replicate_design(data)) - fixed < columns * 8 * n


def test_replicate_rates_take_no_more_for_more_replicates() -> None:
    """Beyond a chunk of records and the sums, memory does not grow with the replicates."""
    n = 200_000
    few, many = (replicate_design(replicated(n, count)) for count in (20, 80))
    more = _peak(lambda: replicate_rates(many)) - _peak(lambda: replicate_rates(few))
    # One column more for each replicate would be 96 megabytes.
    assert more < 4_096 * 60 * 8 + 1_000_000


def test_no_table_of_households_by_groups() -> None:
    """60,000 households and 300 groups: a dense table of totals would be 576 megabytes."""
    n = 160_000
    rng = np.random.default_rng(2)
    data = survey(n, groups=300)
    data["c"] = np.sort(rng.integers(0, 60_000, n))
    data["s"] = data["c"] // 600
    design = design_of(data)
    assert _peak(lambda: second_call(design)) < 150e6


def test_no_table_of_patterns_of_masks() -> None:
    """20 masks and 100,000 patterns: units by patterns would be a table of gigabytes."""
    n = 100_000
    rng = np.random.default_rng(3)
    data = survey(n)
    masks = {f"m{i}": rng.random(n) < 0.5 for i in range(20)}
    for design in (design_of(data), sr.SampleDesign(data, weight="w", strata="s")):
        assert _peak(lambda: sr.estimate_rates(design, "y", by=masks)) < 150e6  # noqa: B023


def test_codes_of_a_design_are_computed_once() -> None:
    """Many outcomes on one design share its tree."""
    data = survey(20_000)
    for i in range(30):
        data[f"o{i}"] = data["y"]
    design = design_of(data)
    rates = sr.estimate_rates(design, [f"o{i}" for i in range(30)], by="g")
    assert len(rates.outcomes) == 30
    assert all(block.source.units.tree is design.tree for block in rates.blocks)
