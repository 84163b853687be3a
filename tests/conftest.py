"""Settings that every test shares."""

from __future__ import annotations

import os
import zlib

import numpy as np
import pytest
from hypothesis import settings

# The same examples every time, here and under CI, so that a failure can be repeated anywhere. New
# ones are looked for on request: `pytest --hypothesis-profile=explore`. A time limit per example
# would measure the machine.
settings.register_profile("ci", derandomize=True, deadline=None, print_blob=True)
settings.register_profile("explore", deadline=None, max_examples=1_000, print_blob=True)
settings.load_profile("ci")

# Commands started by tests draw for this width, whatever the terminal of the person who tests.
os.environ["COLUMNS"] = "80"


@pytest.fixture
def rng(request: pytest.FixtureRequest) -> np.random.Generator:
    """Give each test a generator of its own, the same in every run."""
    return np.random.default_rng(zlib.crc32(request.node.name.encode()))
