"""A survey file for the command line."""

from __future__ import annotations

from pathlib import Path

import pandas as pd
import pytest

import svyrates as sr


@pytest.fixture(scope="session")
def survey() -> pd.DataFrame:
    return sr.demo_survey(wave="2024").iloc[::3].reset_index(drop=True)


@pytest.fixture(scope="session")
def file(survey: pd.DataFrame, tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("data") / "survey.csv"
    survey.to_csv(path, index=False)
    return path
