"""Figures carry the numbers of their table, and nothing in a label can harm them."""

from __future__ import annotations

import builtins
import warnings
import xml.etree.ElementTree as ET
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import svyrates as sr
from svyrates.publish.change import _apart
from svyrates.publish.lettering import SMALL, fitted, harmless, plain_settings, width_of
from svyrates.publish.sheet import DESIGN, GREY, INK, SIMPLE
from tests.words.test_words import HOSTILE

pytest.importorskip("matplotlib")

HOSTILE_LABELS = [
    *(text for text in HOSTILE if text), "$\\frac{", "$x^2$ and $", "two\nlines", "\x1b[31mred",
    "日本語", "עברית", "हिन्दी", "\ue000", "x" * 200, "many words " * 30, "\uffff\x00", "]]>", "--",
]  # fmt: skip


def _design(waves: bool = False) -> sr.SampleDesign:
    survey = sr.demo_survey(wave=None if waves else "2024")
    survey["stratum"] = survey["wave"] + " " + survey["district"]
    return sr.SampleDesign(survey, weight="wt", strata="stratum", clusters="block")


@pytest.fixture(scope="module")
def rates() -> sr.RateTable:
    return sr.estimate_rates(_design(), outcome="damp", by=["sex", "dwelling_type"])


@pytest.fixture(scope="module")
def changing() -> sr.RateTable:
    return sr.estimate_rates(_design(waves=True), outcome="damp", by=["wave", "dwelling_type"])


def _gaps(rates: sr.RateTable, **asked: Any) -> sr.ComparisonTable:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(rates, **asked)


@pytest.fixture(scope="module")
def gaps(rates: sr.RateTable) -> sr.ComparisonTable:
    return _gaps(rates)


def _by_id(ax: Any) -> dict[str, Any]:
    return {str(line.get_gid()): line for line in ax.lines if line.get_gid()}


def _texts(ax: Any) -> list[str]:
    return [text.get_text() for text in ax.texts]


def _holds(ax: Any, name: str, values: Any, limits: str, low: Any, high: Any, axis: str) -> None:
    """Every mark stands at its value, and its limits at theirs; none is left out or added."""
    found = _by_id(ax)
    assert sum(each.startswith(f"{name}-") for each in found if "limits" not in each) == len(values)
    for row, value in enumerate(values):
        mark = getattr(found[f"{name}-{row}"], f"get_{axis}data")()
        ends = getattr(found[f"{limits}-{row}"], f"get_{axis}data")()
        np.testing.assert_allclose(mark, [value], rtol=0, atol=1e-12)
        np.testing.assert_allclose(ends, [low[row], high[row]], rtol=0, atol=1e-12)


@pytest.mark.parametrize("width", [3.35, 6.3])
def test_marks_are_the_numbers(
    rates: sr.RateTable, gaps: sr.ComparisonTable, changing: sr.RateTable, width: float
) -> None:
    ax = sr.draw_rates(rates, width=width)
    _holds(ax, "rate", rates.rate, "limits", rates.low, rates.high, "x")
    ax = sr.draw_comparisons(gaps, width=width)
    _holds(ax, "estimate", gaps.estimate, "limits", gaps.low, gaps.high, "x")
    ax = sr.draw_against_simple(gaps, width=width)
    _holds(ax, "estimate", gaps.estimate, "limits", gaps.low, gaps.high, "x")
    simple = (gaps.simple_estimate, "simple-limits", gaps.simple_low, gaps.simple_high)
    _holds(ax, "simple", *simple, "x")
    ax = sr.draw_change(changing, width=width)
    _holds(ax, "rate", changing.rate, "limits", changing.low, changing.high, "y")


def test_rows_stand_in_table_order_and_within_the_axes(rates: sr.RateTable) -> None:
    ax = sr.draw_rates(rates)
    found = _by_id(ax)
    heights = [found[f"rate-{row}"].get_ydata()[0] for row in range(rates.rate.size)]
    bottom, top = ax.get_ylim()
    assert heights == sorted(heights)
    assert top < heights[0]
    assert heights[-1] < bottom
    assert {"sex: woman", "sex: man", "house", "park home"} <= set(_texts(ax))


@pytest.mark.parametrize("measure", ["ratio", "odds_ratio"])
def test_ratios_stand_on_a_logarithmic_axis(rates: sr.RateTable, measure: Any) -> None:
    gaps = _gaps(rates, measure=measure)
    ax = sr.draw_comparisons(gaps, margin=1.25)
    assert ax.get_xscale() == "log"
    _holds(ax, "estimate", gaps.estimate, "limits", gaps.low, gaps.high, "x")
    np.testing.assert_allclose(_by_id(ax)["null"].get_xdata(), 1.0)
    (band,) = [patch for patch in ax.patches if patch.get_gid() == "margin"]
    edges = band.get_extents().transformed(ax.transData.inverted())
    np.testing.assert_allclose([edges.x0, edges.x1], [0.8, 1.25])


def test_an_open_limit_is_an_arrow_at_the_edge(rates: sr.RateTable) -> None:
    gaps = _gaps(rates, measure="ratio", alternative="greater")
    ax = sr.draw_comparisons(gaps)
    found = _by_id(ax)
    for row in range(len(gaps)):
        np.testing.assert_allclose(
            found[f"limits-{row}"].get_xdata(), [gaps.low[row], ax.get_xlim()[1]]
        )
        assert list(found[f"open-{row}"].get_xdata()) == [ax.get_xlim()[1]]
    assert sum(text.startswith("above ") for text in _texts(ax)) == len(gaps)


def test_percentages_and_proportions_are_not_confused(rates: sr.RateTable) -> None:
    shown, plain = sr.draw_rates(rates), sr.draw_rates(rates, percent=False)
    assert f"{100 * rates.rate[0]:.1f}%" in _texts(shown)
    assert f"{rates.rate[0]:.3f}" in _texts(plain)
    assert all(label.get_text().endswith("%") for label in shown.get_xticklabels())
    assert not any("%" in label.get_text() for label in plain.get_xticklabels())
    for ax in (shown, plain):
        times = 100.0 if ax is shown else 1.0
        for tick, label in zip(ax.get_xticks(), ax.get_xticklabels(), strict=True):
            assert float(label.get_text().rstrip("%")) == pytest.approx(times * tick)


def test_evidence_and_verdict_show_without_colour(gaps: sr.ComparisonTable) -> None:
    found = _by_id(sr.draw_comparisons(gaps))
    for row, p in enumerate(gaps.p):
        filled = found[f"estimate-{row}"].get_markerfacecolor() != "white"
        assert filled == (p < 1 - gaps.level)
    ax = sr.draw_against_simple(gaps)
    said = [text for text in ax.texts if text.get_text().removeprefix("▲ ") in set(gaps.verdict)]
    assert [text.get_text().removeprefix("▲ ") for text in said] == list(gaps.verdict)
    for text, verdict in zip(said, gaps.verdict, strict=True):
        misleads = verdict not in ("agrees", "undetermined")
        assert text.get_text().startswith("▲") == misleads
        assert (text.get_fontweight() == "bold") == misleads
    found = _by_id(ax)
    assert found["estimate-0"].get_marker() != found["simple-0"].get_marker()


def _luminance(color: str) -> float:
    """Relative luminance of sRGB, as in the Web Content Accessibility Guidelines 2.2."""
    parts = np.array([int(color[at : at + 2], 16) / 255 for at in (1, 3, 5)])
    linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


@pytest.mark.parametrize("color", [INK, GREY, DESIGN, SIMPLE])
def test_text_has_contrast_on_white(color: str) -> None:
    assert 1.05 / (_luminance(color) + 0.05) >= 4.5


def test_rows_without_limits_have_a_dash_and_no_mark(
    rates: sr.RateTable, changing: sr.RateTable
) -> None:
    low = rates.low.copy()
    rate = rates.rate.copy()
    low[1] = rate[2] = np.nan
    ax = sr.draw_rates(replace(rates, low=low, rate=rate))
    found = _by_id(ax)
    for row in range(rates.rate.size):
        assert (f"rate-{row}" in found) == (f"limits-{row}" in found) == (row not in (1, 2))
    assert _texts(ax).count("–") == 4
    last = len(changing.rate) - 1
    high = changing.high.copy()
    high[[0, last]] = np.nan
    ax = sr.draw_change(replace(changing, high=high))
    assert {"rate-0", f"rate-{last}", f"limits-{last}"}.isdisjoint(_by_id(ax))
    assert _texts(ax).count("–") == 1
    assert np.isnan(_by_id(ax)["line-0"].get_ydata()[0])


def test_nothing_known_at_all(rates: sr.RateTable, changing: sr.RateTable) -> None:
    nothing = np.full(rates.rate.size, np.nan)
    assert not [k for k in _by_id(sr.draw_rates(replace(rates, rate=nothing))) if "rate" in k]
    nothing = np.full(changing.rate.size, np.nan)
    assert not [k for k in _by_id(sr.draw_change(replace(changing, low=nothing))) if "rate" in k]


def test_comparisons_without_limits(gaps: sr.ComparisonTable) -> None:
    high = gaps.high.copy()
    high[0] = np.nan
    simple = gaps.simple_low.copy()
    simple[1] = np.nan
    table = replace(gaps, high=high, simple_low=simple)
    assert {"estimate-0", "limits-0"}.isdisjoint(_by_id(sr.draw_comparisons(table)))
    found = _by_id(sr.draw_against_simple(table))
    assert {"estimate-0", "limits-0", "simple-1", "simple-limits-1"}.isdisjoint(found)
    assert {"simple-0", "estimate-1"} <= set(found)


def test_a_rate_of_zero_is_a_mark_at_zero() -> None:
    data = pd.DataFrame({"y": [0] * 20 + [0, 1] * 10, "g": ["never"] * 20 + ["half"] * 20})
    data["c"] = np.arange(40) % 8
    rates = sr.estimate_rates(sr.SampleDesign(data, clusters="c"), "y", by="g")
    found = _by_id(sr.draw_rates(rates))
    row = [group[0] for group in rates.groups].index("never")
    assert list(found[f"rate-{row}"].get_xdata()) == [0.0]
    assert list(found[f"limits-{row}"].get_xdata()) == [0.0, rates.high[row]]
    assert not found[f"rate-{row}"].get_clip_on()


def test_height_grows_with_rows(rates: sr.RateTable) -> None:
    few = sr.estimate_rates(_design(), outcome="damp", by="terrain")
    small, large = (sr.draw_rates(table).figure for table in (few, rates))
    assert small.get_figwidth() == large.get_figwidth() == 6.3
    assert large.get_figheight() > small.get_figheight() + 4 * 15 / 72


@pytest.mark.parametrize("width", [3.35, 6.3])
@pytest.mark.parametrize("draw", [sr.draw_comparisons, sr.draw_against_simple])
def test_texts_stay_in_the_figure_and_apart(
    gaps: sr.ComparisonTable, draw: Callable[..., Any], width: float
) -> None:
    ax = draw(gaps, width=width)
    boxes = [text.get_window_extent() for text in ax.texts]
    page = ax.figure.bbox
    for number, box in enumerate(boxes):
        assert page.x0 <= box.x0
        assert box.x1 <= page.x1 + 1
        assert page.y0 <= box.y0
        assert box.y1 <= page.y1
        for other in boxes[:number]:
            across = min(box.x1, other.x1) - max(box.x0, other.x0)
            up = min(box.y1, other.y1) - max(box.y0, other.y0)
            assert not (across > 1 and up > 3), (number, ax.texts[number])


def test_no_letter_is_too_small(gaps: sr.ComparisonTable, changing: sr.RateTable) -> None:
    for ax in (sr.draw_against_simple(gaps), sr.draw_change(changing)):
        labels = [*ax.texts, *ax.get_xticklabels(), *ax.get_yticklabels()]
        assert min(text.get_fontsize() for text in labels) >= SMALL >= 7


@pytest.mark.parametrize("layout", [None, "constrained"])
def test_given_axes_are_drawn_on(
    rates: sr.RateTable, gaps: sr.ComparisonTable, changing: sr.RateTable, layout: Any
) -> None:
    from matplotlib.figure import Figure

    figure = Figure(figsize=(14, 10), layout=layout)
    axes = figure.subplots(2, 2).ravel()
    before = [ax.get_position() for ax in axes]
    tables = (rates, gaps, gaps, changing)
    drawers: tuple[Callable[..., Any], ...] = (
        sr.draw_rates, sr.draw_comparisons, sr.draw_against_simple, sr.draw_change,
    )  # fmt: skip
    for draw, table, ax, place in zip(drawers, tables, axes, before, strict=True):
        assert draw(table, ax) is ax
        assert ax.lines
        if layout is None:
            left = min(text.get_window_extent().x0 for text in ax.texts)
            right = max(text.get_window_extent().x1 for text in ax.texts)
            inside = place.transformed(figure.transFigure)
            assert inside.x0 <= left
            assert right <= inside.x1 + 1
    assert sr.svg_of(figure).startswith("<svg")


def test_axes_that_are_too_small_are_refused(rates: sr.RateTable) -> None:
    from matplotlib.figure import Figure

    ax = Figure(figsize=(1.5, 1)).add_subplot()
    with pytest.raises(sr.FigureError, match="axes are too small"):
        sr.draw_rates(rates, ax)


def test_what_cannot_be_drawn(rates: sr.RateTable, gaps: sr.ComparisonTable) -> None:
    wrong: Any = gaps
    with pytest.raises(sr.FigureError, match="drawn from a RateTable; got ComparisonTable"):
        sr.draw_rates(wrong)
    for width in (0.5, "wide", float("nan")):
        with pytest.raises(sr.FigureError, match="width"):
            sr.draw_rates(rates, width=width)  # type: ignore[arg-type]
    for margin in (-0.05, (0.01, 0.05), "x", (1, 2, 3), float("nan")):
        with pytest.raises(sr.FigureError, match="margin"):
            sr.draw_comparisons(gaps, margin=margin)  # type: ignore[arg-type]
    with pytest.raises(sr.FigureError, match="first grouping column"):
        sr.draw_change(sr.estimate_rates(_design(), outcome="damp"))
    for prefix in ("", "1st", 'a"b', "a b"):
        with pytest.raises(sr.FigureError, match="prefix"):
            sr.svg_of(sr.draw_rates(rates), prefix=prefix)
    with pytest.raises(sr.FigureError, match="takes a matplotlib Figure"):
        sr.svg_of("figure")  # type: ignore[arg-type]


def _hostile(label: str) -> tuple[sr.RateTable, sr.RateTable]:
    label = label.replace("\ud800", "?")
    data: dict[str, Any] = {f"g {label}": [label, "plain"] * 60, "c": [i % 6 for i in range(120)]}
    data[f"y {label}"] = [0, 1, 1, 0, 1, 1] * 20
    data[f"w {label}"] = [f"{label} {i // 60}" for i in range(120)]
    design = sr.SampleDesign(pd.DataFrame(data), clusters="c")
    group, outcome, wave = f"g {label}", f"y {label}", f"w {label}"
    return (
        sr.estimate_rates(design, outcome, by=group),
        sr.estimate_rates(design, outcome, by=[wave, group]),
    )


@pytest.mark.parametrize("label", HOSTILE_LABELS)
def test_hostile_labels_are_harmless(label: str) -> None:
    rates, changing = _hostile(label)
    gaps = _gaps(rates)
    drawn = (
        sr.draw_rates(rates), sr.draw_comparisons(gaps, width=3.35), sr.draw_against_simple(gaps),
        sr.draw_change(changing),
    )  # fmt: skip
    for ax in drawn:
        root = ET.fromstring(sr.svg_of(ax))  # noqa: S314 - our own
        names = {element.tag.rpartition("}")[2] for element in root.iter()}
        assert not names & {"script", "style", "image", "foreignObject", "a", "b", "img"}
        assert not any(
            name.lower().startswith("on") for each in root.iter() for name in each.attrib
        )
        shown = "".join(root.itertext())
        assert "\x1b" not in shown
        assert "\u202e" not in shown
        for text in [*ax.texts, *ax.get_xticklabels(), *ax.get_yticklabels()]:
            box = text.get_window_extent() if text.get_text().isascii() else None
            assert box is None or box.width <= ax.figure.bbox.width


def test_mathematics_and_tex_are_never_read(rates: sr.RateTable) -> None:
    import matplotlib as mpl

    with mpl.rc_context({"text.usetex": True}):
        table, changing = _hostile("$x^2$")
        for ax in (sr.draw_rates(table), sr.draw_change(changing)):
            labels = [*ax.texts, *ax.get_xticklabels()]
            assert not any(text.get_parse_math() or text.get_usetex() for text in labels)
            assert any("$x^2$" in text.get_text() for text in labels)


@given(st.text(max_size=300), st.floats(20, 300), st.integers(1, 3))
def test_text_is_cut_to_its_room(text: str, most: float, lines: int) -> None:
    with plain_settings():
        broken = fitted(text, most, lines=lines)
        assert 1 <= len(broken) <= lines
        assert all(width_of(line, 8.0) <= most for line in broken)
        if "…" not in "".join(broken):
            assert " ".join(broken) == harmless(text)


def _places_by_search(wanted: list[float], spacing: float) -> Any:
    """The least-squares answer by a general optimiser."""
    from scipy.optimize import minimize

    goal = np.sort(wanted)
    apart = {"type": "ineq", "fun": lambda at: np.diff(at) - spacing}
    found = minimize(
        lambda at: ((at - goal) ** 2).sum(), goal + spacing * np.arange(len(goal)),
        constraints=[apart], method="SLSQP", options={"ftol": 1e-12, "maxiter": 500},
    )  # fmt: skip
    return found.x


@pytest.mark.parametrize("wanted", [[50.0, 51, 52, 120], [200.0, 90, 91, 95, 96, 99], [70.0]])
def test_end_labels_are_moved_apart_and_no_further(wanted: list[float]) -> None:
    places = _apart(np.array(wanted), 10.0, 1000.0)
    np.testing.assert_allclose(np.sort(places), _places_by_search(wanted, 10.0), atol=1e-4)
    assert np.array_equal(np.argsort(places), np.argsort(wanted))
    kept = _apart(np.array(wanted), 10.0, 100.0)
    assert kept.min() >= 0
    assert kept.max() <= 100.0 + 1e-9


def test_without_matplotlib_the_error_says_what_to_install(
    rates: sr.RateTable, monkeypatch: pytest.MonkeyPatch
) -> None:
    usual = builtins.__import__

    def without(name: str, *rest: Any, **more: Any) -> Any:
        if name.split(".", maxsplit=1)[0] == "matplotlib":
            raise ModuleNotFoundError(f"No module named {name!r}", name=name)
        return usual(name, *rest, **more)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(sr.FigureError, match=r"pip install 'svyrates\[figures\]'"):
        sr.draw_rates(rates)
