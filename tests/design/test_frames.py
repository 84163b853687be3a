"""Any library, any dtype: the same values give the same numbers and the same labels."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import narwhals as plain_nw
import narwhals.stable.v2 as nw
import numpy as np
import pandas as pd
import pytest

import svyrates as sr

pl = pytest.importorskip("polars")
pa = pytest.importorskip("pyarrow")


def _survey() -> pd.DataFrame:
    survey = sr.demo_survey(wave="2024").iloc[::7].reset_index(drop=True)
    survey["ticked"] = survey["help_grant"].astype("boolean")
    survey["code"] = survey["tenure"].cat.codes.astype("Int64").where(survey["damp"] == 1)
    return survey


KINDS: dict[str, Callable[[pd.DataFrame], Any]] = {
    "pandas": lambda data: data,
    "pandas with nullable dtypes": lambda data: data.convert_dtypes(),
    "pandas with objects": lambda data: data.assign(
        **{name: data[name].astype(object) for name in ("district", "sex", "tenure")}
    ),
    "pandas with an odd index": lambda data: data.set_index(np.arange(len(data))[::-1] * 3),
    "pandas on arrow": lambda data: data.convert_dtypes(dtype_backend="pyarrow"),
    "polars": pl.from_pandas,
    "polars lazy": lambda data: pl.from_pandas(data).lazy(),
    "pyarrow": lambda data: pa.Table.from_pandas(data, preserve_index=False),
}


def _answers(data: Any, by: Any) -> pd.DataFrame:
    design = sr.SampleDesign(
        data,
        weight="wt",
        strata=["terrain", "district"],
        clusters=["block", "dwelling"],
        population="blocks_in_district",
        single_cluster_strata="collapse",
    )
    rates = sr.estimate_rates(
        design, {"cold": ("cold_home", ["often", "always"]), "wet": "damp"}, by=by, where="ticked"
    )
    return rates.to_frame()


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("by", ["sex", "code", ["wave", "age_group"], {"grant": "help_grant"}])
def test_same_numbers(kind: str, by: Any) -> None:
    expected = _answers(_survey(), by)
    found = _answers(KINDS[kind](_survey()), by)
    if kind in ("pandas with objects", "polars", "polars lazy"):
        # Without categories the groups come in the order of their labels.
        names = list(expected.columns[: expected.columns.get_loc("n")])
        expected = expected.astype(dict.fromkeys(names, str)).sort_values(names)
        found = found.astype(dict.fromkeys(names, str)).sort_values(names)
        expected, found = expected.reset_index(drop=True), found.reset_index(drop=True)
    pd.testing.assert_frame_equal(found, expected, check_exact=False, rtol=1e-13, check_dtype=False)


def test_categories_keep_their_order_and_empty_ones_are_shown() -> None:
    survey = sr.demo_survey(wave="2024")
    survey["tenure"] = survey["tenure"].cat.add_categories(["houseboat"])
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="tenure")
    assert [label[0] for label in rates.groups] == [
        *sr.demo_survey()["tenure"].cat.categories,
        "houseboat",
    ]
    last = rates.to_frame().iloc[-1]
    assert last["n"] == 0
    assert np.isnan(last["rate"])
    assert last["note"] == "no members"
    enum = pl.from_pandas(survey.astype({"tenure": str})).with_columns(
        pl.col("tenure").cast(pl.Enum([*survey["tenure"].cat.categories, "nan"]), strict=False)
    )
    again = sr.estimate_rates(
        sr.SampleDesign(enum, weight="wt", strata="district", clusters="block"), "damp", by="tenure"
    )
    assert [label[0] for label in again.groups][:5] == [label[0] for label in rates.groups]


def test_codes_with_missing_values_keep_their_labels() -> None:
    """Integers with gaps become floats in some libraries; 2.0 and 2 are one label."""
    data = pd.DataFrame({"g": [1.0, 2.0, np.nan, 2.0], "y": [0, 1, 1, 0]})
    rates = sr.estimate_rates(sr.SampleDesign(data), "y", by="g")
    assert rates.groups == ((1,), (2,))
    assert rates.coverage.n_group_unknown == 1


@pytest.mark.parametrize("namespace", [nw, plain_nw])
def test_masks_of_every_kind(namespace: Any) -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    inside = survey["age_group"] == "75 and over"
    survey_mask = inside.to_numpy()
    first = sr.estimate_rates(design, "damp", by="sex", where=survey_mask)
    for mask in (inside, survey_mask.tolist(), namespace.col("age_group") == "75 and over"):
        assert sr.estimate_rates(design, "damp", by="sex", where=mask) == first


def test_a_null_in_where_is_outside_and_counted() -> None:
    data = pd.DataFrame({"y": [0, 1, 1, 0], "m": pd.array([True, None, True, False], "boolean")})
    rates = sr.estimate_rates(sr.SampleDesign(data), "y", where="m")
    assert rates.n[0] == 2
    assert rates.coverage.n_where_unknown == 1
    assert "1 of them with an unknown" in str(rates)
