"""Gaps taken apart (Kitagawa 1955): by arithmetic, by leaving blocks out, and at the ends."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr


def _by_hand(data: pd.DataFrame, w: np.ndarray) -> np.ndarray:
    """Difference, composition and rates of owners against private tenants, one loop over ages."""
    data = data.assign(w=w)
    groups = [data[data["tenure"] == name] for name in ("private tenant", "owner")]
    composition = rates = 0.0
    for age in data["age_group"].cat.categories:
        q, r = [], []
        for group in groups:
            cell = group[group["age_group"] == age]
            q.append(cell["w"].sum() / group["w"].sum())
            r.append((cell["w"] * cell["damp"]).sum() / cell["w"].sum())
        composition += (q[0] - q[1]) * (r[0] + r[1]) / 2
        rates += (r[0] - r[1]) * (q[0] + q[1]) / 2
    whole = [(group["w"] * group["damp"]).sum() / group["w"].sum() for group in groups]
    return np.array([whole[0] - whole[1], composition, rates])


@pytest.fixture(scope="module")
def design() -> sr.SampleDesign:
    survey = sr.demo_survey(wave="2024")
    return sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")


def _parts(found: sr.DecompositionTable, group: str = "private tenant") -> pd.DataFrame:
    frame = found.to_frame()
    return frame[(frame["group"] == group) & (frame["category"] == "")]


def test_parts_and_their_errors_by_hand(design: sr.SampleDesign) -> None:
    data = design.frame.to_native()
    w = data["wt"].to_numpy()
    found = sr.gap_decomposition(design, "damp", "tenure", "age_group", versus="owner")
    parts = _parts(found)
    full = _by_hand(data, w)
    np.testing.assert_allclose(parts["estimate"], full, rtol=1e-12)
    assert parts["part"].tolist() == ["difference", "composition", "rates"]
    assert full[0] == pytest.approx(full[1] + full[2], rel=1e-12)
    # Linearized: derivatives along the weights of each block by a small step.
    codes = data.groupby(["district", "block"]).ngroup().to_numpy()
    district = data.groupby(codes)["district"].first().to_numpy()
    z = np.zeros((codes.max() + 1, 3))
    total = np.zeros((3, 3))
    for unit in range(len(z)):
        step = 1e-5 * (codes == unit)
        z[unit] = (_by_hand(data, w * (1 + step)) - _by_hand(data, w * (1 - step))) / 2e-5
    for name in np.unique(district):
        units = z[district == name]
        away = units - units.mean(axis=0)
        total += len(units) / (len(units) - 1) * away.T @ away
    np.testing.assert_allclose(parts["se"], np.sqrt(np.diag(total)), rtol=1e-6)
    # And under replicates, every block left out in turn.
    jackknife = sr.make_replicates(design, "stratified-jackknife")
    again = _parts(sr.gap_decomposition(jackknife, "damp", "tenure", "age_group", versus="owner"))
    away = []
    for unit in range(len(z)):
        here = district[codes] == district[unit]
        n_units = (district == district[unit]).sum()
        factor = np.where(codes == unit, 0.0, np.where(here, n_units / (n_units - 1), 1.0))
        away.append(np.sqrt((n_units - 1) / n_units) * (_by_hand(data, w * factor) - full))
    np.testing.assert_allclose(again["se"], np.sqrt((np.array(away) ** 2).sum(axis=0)), rtol=1e-8)


def test_categories_add_up_and_swapping_turns_signs(design: sr.SampleDesign) -> None:
    frame = sr.gap_decomposition(design, "damp", "sex", "tenure").to_frame()
    for part in ("composition", "rates"):
        here = frame[frame["part"] == part]
        whole = here[here["category"] == ""]["estimate"].item()
        assert here[here["category"] != ""]["estimate"].sum() == pytest.approx(whole, abs=1e-14)
    swapped = sr.gap_decomposition(design, "damp", "sex", "tenure", versus="woman").to_frame()
    one = frame.set_index(["part", "category"])
    other = swapped.set_index(["part", "category"])
    np.testing.assert_allclose(one["estimate"], -other["estimate"].reindex(one.index), atol=1e-14)
    np.testing.assert_allclose(one["se"], other["se"].reindex(one.index), rtol=1e-9)
    pair = sr.estimate_rates(design, "damp", by="sex", where="thermostat")
    inside = sr.gap_decomposition(design, "damp", "sex", "tenure", where="thermostat").to_frame()
    assert inside["estimate"][0] == pytest.approx(pair.rate[0] - pair.rate[1], abs=0.01)
    np.testing.assert_allclose(inside["share"][:3].sum(), 2.0)


def _made(q: dict[str, Any], r: dict[str, Any]) -> pd.DataFrame:
    rows = []
    for group, shares in q.items():
        for category, size in shares.items():
            successes = round(size * r[group][category])
            rows += [(group, category, int(i < successes)) for i in range(size)]
    return pd.DataFrame(rows, columns=["g", "c", "y"])


def test_only_composition_or_only_rates_differ() -> None:
    alike = {"x": 0.2, "y": 0.6}
    shares = {"a": {"x": 100, "y": 300}, "b": {"x": 300, "y": 100}}
    composed = sr.SampleDesign(_made(shares, {"a": alike, "b": alike}))
    frame = sr.gap_decomposition(composed, "y", "g", "c").to_frame()
    assert frame["estimate"][:3].tolist() == pytest.approx([0.2, 0.2, 0.0], abs=1e-12)
    same = {"a": {"x": 200, "y": 200}, "b": {"x": 200, "y": 200}}
    rated = sr.SampleDesign(_made(same, {"a": alike, "b": {"x": 0.1, "y": 0.4}}))
    frame = sr.gap_decomposition(rated, "y", "g", "c").to_frame()
    assert frame["estimate"][:3].tolist() == pytest.approx([0.15, 0.0, 0.15], abs=1e-12)


def test_cells_without_sample() -> None:
    shares = {"a": {"x": 100, "y": 300}, "b": {"x": 300, "z": 100}}
    rates = {"a": {"x": 0.2, "y": 0.5}, "b": {"x": 0.2, "z": 0.5}}
    design = sr.SampleDesign(_made(shares, rates))
    with pytest.raises(
        sr.QuestionError, match=r"2 cells of g × c have no sample \('a in z', 'b in y'\)"
    ):
        sr.gap_decomposition(design, "y", "g", "c")
    merged = sr.gap_decomposition(design, "y", "g", "c", merge={"c": {"z": "y"}})
    assert merged.to_frame()["estimate"][0] == pytest.approx(0.425 - 0.275)
    three = _made(shares | {"d": {"x": 50, "y": 50}}, rates | {"d": {"x": 0.4, "y": 0.4}})
    # A category that neither group of a pair has leaves their pair alone.
    pair = sr.gap_decomposition(
        sr.SampleDesign(three[three["g"] != "b"].reset_index(drop=True)), "y", "g", "c"
    )
    assert set(pair.category) == {"", "x", "y"}


def test_bad_question(design: sr.SampleDesign) -> None:
    with pytest.raises(sr.QuestionError, match="versus='nobody' is not a group"):
        sr.gap_decomposition(design, "damp", "sex", "tenure", versus="nobody")
    with pytest.raises(sr.QuestionError, match="there is no column 'tenur'"):
        sr.gap_decomposition(design, "damp", "sex", "tenur")
    with pytest.raises(sr.QuestionError, match="both `by` and `adjust_for`"):
        sr.gap_decomposition(design, "damp", "sex", "sex")
    with pytest.raises(sr.QuestionError, match="`design` must be a SampleDesign"):
        sr.gap_decomposition(None, "damp", "sex", "tenure")  # type: ignore[arg-type]
