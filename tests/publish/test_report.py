"""The report: self-contained, harmless, the same on every run, and usable by everyone."""

from __future__ import annotations

import builtins
import hashlib
import html
import json
import os
import re
import shutil
import subprocess
import sys
import tarfile
import warnings
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import svyrates as sr
from svyrates.publish import Answer, ReportFacts, build_report

AXE = "axe-core@4.10.3"
VOID = {"meta", "br", "hr", "img", "link", "input", "path", "use", "rect", "circle", "line"}


def _answer(title: str, rates: sr.RateTable, versus: Any = None, **options: Any) -> Answer:
    others = options.pop("others", ())
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", sr.SimpleFormulaWarning)
        gaps = sr.compare_rates(rates, versus, **options)
    public = sr.withhold_rates(rates)
    return Answer(title, public, sr.withhold_comparisons(gaps, public), tuple(others))


def _page(*, figures: bool = True) -> str:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    success = ["often", "always"]
    cold = sr.estimate_rates(design, "cold_home", success=success, by="tenure")
    adjusted = sr.adjusted_rates(
        design, "cold_home ~ tenure + age_group", by="tenure", success=success
    )
    answers = [
        _answer("Who is cold?", cold, multiplicity="holm", others=[sr.homogeneity_test(cold)]),
        _answer("Damp?", sr.estimate_rates(design, "damp", by="dwelling_type"), "park home"),
        _answer("Of the same age?", adjusted, "owner", others=[adjusted.model]),
    ]
    facts = ReportFacts(
        "Winter homes", design.summary(), "survey.csv", "ab" * 32, len(survey),
        'title = "Winter homes"\n', (("Peat?", "there is no column 'peat'"),),
    )  # fmt: skip
    return build_report(facts, answers, figures=figures)


@pytest.fixture(scope="module")
def page() -> str:
    pytest.importorskip("matplotlib")
    return _page()


class _Checker(HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.ids: list[str] = []
        self.tags: list[str] = []
        self.links: list[str] = []
        self.text: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        if tag not in VOID:
            self.open.append(tag)
        for name, value in attrs:
            if name == "id":
                self.ids.append(str(value))
            if name in ("href", "src", "xlink:href"):
                self.links.append(str(value))

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.ids += [str(value) for name, value in attrs if name == "id"]
        self.links += [str(value) for name, value in attrs if name in ("href", "xlink:href")]

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID:
            assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text.append(data)


def _check(page: str) -> _Checker:
    checker = _Checker()
    checker.feed(page)
    assert checker.open == []
    return checker


def test_one_sound_self_contained_page(page: str) -> None:
    found = _check(page)
    assert len(found.ids) == len(set(found.ids))
    assert found.tags.count("h1") == 1
    assert not {"script", "iframe", "object", "link"} & set(found.tags)
    assert all(link.startswith("#") for link in found.links)
    assert {link[1:] for link in found.links} <= set(found.ids)
    assert not re.search(r"@import|url\(\s*['\"]?(?!#)", page)
    assert found.tags.count("main") == found.tags.count("nav") == 1
    text = " ".join(found.text)
    for said in (
        "Who is cold?", "The simple formula would mislead in", "Korn, E. L. & Graubard",
        "A difference between groups is not its cause", "there is no column 'peat'", "ab" * 32,
        "predictive margins", "withhold", "Series 2 No. 175", "qualified person",
    ):  # fmt: skip
        assert said in text
    assert page.count("<figure>") >= 5


def test_the_same_on_every_run(page: str) -> None:
    assert _page() == page
    code = (
        "import sys, hashlib, warnings; warnings.simplefilter('ignore');"
        "from tests.publish.test_report import _page;"
        "sys.stdout.write(hashlib.sha256(_page().encode()).hexdigest())"
    )
    root = Path(__file__).parents[2]
    run = subprocess.run(
        [sys.executable, "-c", code], cwd=root, capture_output=True, text=True, check=True
    )
    assert run.stdout == hashlib.sha256(page.encode()).hexdigest()


def test_withheld_numbers_are_not_there(page: str) -> None:
    survey = sr.demo_survey(wave="2024")
    design = sr.SampleDesign(survey, weight="wt", strata="district", clusters="block")
    rates = sr.estimate_rates(design, "damp", by="dwelling_type")
    row = [str(label[0]) for label in rates.groups].index("park home")
    assert f"{100 * rates.rate[row]:.1f}%" not in page
    assert f"{rates.n[row]:.0f}</td>" not in page
    assert f"{100 * rates.se[row]:.2f}%" not in page


def test_hostile_names_are_harmless() -> None:
    rng = np.random.default_rng(5)
    evil = [
        "<script>alert(1)</script>",
        "\x1b[31m",
        "\u202eabc",
        '"><img src=x onerror=y>',
        "x" * 300,
    ]
    data = pd.DataFrame({"<b>g</b>": rng.choice(evil, 900), "y": rng.integers(0, 2, 900)})
    design = sr.SampleDesign(data)
    rates = sr.estimate_rates(design, {"<i>y</i>": "y"}, by="<b>g</b>")
    answer = _answer("<script>alert(2)</script>", rates, multiplicity="max-t")
    facts = ReportFacts(
        "</title><script>x</script>", design.summary(), "<a>.csv", "00", 900,
        "</pre><script>", (("<u>", "<s>"),),
    )  # fmt: skip
    for figures in {False, _has_matplotlib()}:
        page = build_report(facts, [answer], figures=figures)
        found = _check(page)
        assert not {"script", "img", "i", "b", "u", "s"} & set(found.tags)
        assert "\x1b" not in page
        assert "\u202e" not in page


def _has_matplotlib() -> bool:
    try:
        import matplotlib as mpl  # noqa: F401
    except ImportError:
        return False
    return True


def test_without_matplotlib_it_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    real = builtins.__import__

    def refuse(name: str, *arguments: Any, **options: Any) -> Any:
        if name.split(".", maxsplit=1)[0] == "matplotlib":
            raise ImportError(name)
        return real(name, *arguments, **options)

    for name in [name for name in sys.modules if name.split(".")[0] == "matplotlib"]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setattr(builtins, "__import__", refuse)
    page = _page()
    assert "This report has no figures, because matplotlib is not installed." in page
    assert "<figure>" not in page
    assert "<figure>" not in _page(figures=False)


def _chromium() -> str:
    """The browser, or skip; under CI a missing one is a failure."""
    found = shutil.which("chromium") or shutil.which("chromium-browser")
    if found is None:
        if os.environ.get("CI"):
            pytest.fail("chromium is not installed")
        pytest.skip("chromium is not installed")
    return found


def _browse(page: Path, tmp_path: Path, *options: str) -> subprocess.CompletedProcess[str]:
    flags = [
        "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
        "--disable-background-networking", "--disable-component-update", "--disable-sync",
        f"--user-data-dir={tmp_path / 'profile'}", "--enable-logging=stderr",
    ]  # fmt: skip
    return subprocess.run(
        [_chromium(), *flags, *options, page.as_uri()],
        capture_output=True, text=True, check=True, timeout=120,
    )  # fmt: skip


@pytest.mark.slow
def test_a_browser_has_nothing_to_complain_of(page: str, tmp_path: Path) -> None:
    file = tmp_path / "report.html"
    file.write_text(page, encoding="utf-8")
    shot = tmp_path / "report.png"
    run = _browse(file, tmp_path, f"--screenshot={shot}", "--window-size=1000,3000")
    assert "CONSOLE" not in run.stderr
    assert shot.stat().st_size > 50_000


@pytest.mark.slow
@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_accessibility_rules(page: str, tmp_path: Path, scheme: str) -> None:
    """axe-core, pinned, inlined into a copy; it needs npm to be fetched."""
    npm = shutil.which("npm")
    if npm is None:
        pytest.skip("npm is not installed")
    fetched = subprocess.run(
        [npm, "pack", "--silent", AXE], cwd=tmp_path, capture_output=True, text=True, check=False
    )
    if fetched.returncode:
        pytest.skip("axe-core cannot be fetched")
    with tarfile.open(tmp_path / fetched.stdout.strip().splitlines()[-1]) as archive:
        member = archive.extractfile("package/axe.min.js")
        assert member is not None
        axe = member.read().decode()
    run = (
        "axe.run().then(r => { const p = document.createElement('pre'); p.id = 'axe';"
        "p.textContent = JSON.stringify(r.violations.map(v => [v.id, v.nodes.map(n => n.html)]));"
        "document.body.appendChild(p); });"
    )
    styled = page
    if scheme == "dark":
        styled = page.replace("@media (prefers-color-scheme: dark)", "@media all")
    file = tmp_path / "tested.html"
    body = f"<script>{axe}</script><script>{run}</script></body>"
    file.write_text(styled.replace("</body>", body), encoding="utf-8")
    dom = _browse(file, tmp_path, "--dump-dom", "--virtual-time-budget=20000").stdout
    found = re.search(r'<pre id="axe">(.*?)</pre>', dom, re.DOTALL)
    assert found is not None
    assert json.loads(html.unescape(found[1])) == []
