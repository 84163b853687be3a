"""SVG of figures: the same bytes every time, in every process, and fit for a page."""

from __future__ import annotations

import os
import subprocess
import sys
import warnings
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest

import svyrates as sr

pytest.importorskip("matplotlib")

ROOT = Path(__file__).parents[2]


def _rates() -> sr.RateTable:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    return sr.estimate_rates(design, outcome="damp", by="dwelling_type")


def _gaps() -> sr.ComparisonTable:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        return sr.compare_rates(_rates())


def _parsed(svg: str) -> ET.Element:
    return ET.fromstring(svg)  # noqa: S314 - our own


def test_svg_is_the_same_every_time_and_fit_for_a_page() -> None:
    gaps = _gaps()
    one = sr.svg_of(sr.draw_against_simple(gaps), prefix="one")
    assert one == sr.svg_of(sr.draw_against_simple(gaps), prefix="one")
    two = sr.svg_of(sr.draw_against_simple(gaps).figure, prefix="two", title='A <b>"title"</b>')
    assert one.startswith("<svg ")
    for absent in ("<?xml", "<!", "<style", "<metadata", "<script", "dc:date"):
        assert absent not in one
    ids = [{each.get("id") for each in _parsed(svg).iter() if each.get("id")} for svg in (one, two)]
    assert ids[0].isdisjoint(ids[1])
    assert all(name.startswith("one-") for name in ids[0] if name)
    for svg, known in zip((one, two), ids, strict=True):
        root = _parsed(svg)
        every = [each.get("id") for each in root.iter() if each.get("id")]
        assert len(every) == len(set(every))
        used = {each.get("href") for each in root.iter() if each.get("href")}
        used |= {
            value[4:-1] for each in root.iter() for value in each.attrib.values()
            if value.startswith("url(")
        }  # fmt: skip
        assert used
        assert {str(name)[1:] for name in used} <= known
        assert root.get("role") == "img"
        title = root[0]
        assert title.tag.endswith("title")
        assert title.get("id") == root.get("aria-labelledby")
    assert _parsed(one)[0].text == "Differences of rates of damp = 1"
    assert _parsed(two)[0].text == 'A <b>"title"</b>'


def test_style_of_the_user_changes_nothing() -> None:
    import matplotlib as mpl

    rates = _rates()
    plain = sr.svg_of(sr.draw_rates(rates))
    loud = {
        "font.size": 20, "axes.grid": True, "savefig.bbox": "tight", "text.color": "red",
        "figure.constrained_layout.use": True, "lines.linewidth": 9, "svg.fonttype": "path",
    }  # fmt: skip
    with mpl.rc_context(loud):
        assert sr.svg_of(sr.draw_rates(rates)) == plain
        assert mpl.rcParams["font.size"] == 20


PROGRAM = """
import sys
import svyrates as sr
survey = sr.demo_survey(wave="2024")
design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
rates = sr.estimate_rates(design, outcome="damp", by="dwelling_type")
assert "matplotlib" not in sys.modules
sys.stdout.buffer.write(sr.svg_of(sr.draw_rates(rates), prefix="damp").encode())
assert "matplotlib.pyplot" not in sys.modules
"""


def test_other_processes_draw_the_same_and_without_global_state() -> None:
    drawn = [
        subprocess.run(
            [sys.executable, "-c", PROGRAM], cwd=ROOT, capture_output=True, check=True,
            env={**os.environ, "PYTHONHASHSEED": seed},
        ).stdout
        for seed in ("1", "2")
    ]  # fmt: skip
    here = sr.svg_of(sr.draw_rates(_rates()), prefix="damp").encode()
    assert drawn == [here, here]
