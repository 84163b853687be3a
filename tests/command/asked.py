"""How the tests ask: the demo survey's design and a question, and a run of the command."""

from __future__ import annotations

import pytest

from svyrates.command import main

__all__ = ["DESIGN", "QUESTION", "run"]

DESIGN = ["--weight", "wt", "--strata", "district", "--clusters", "block"]
QUESTION = ["--outcome", "cold_home", "--success", "often", "--success", "always"]


def run(*arguments: object) -> int:
    """Exit code of the command."""
    with pytest.raises(SystemExit) as stopped:
        main([str(argument) for argument in arguments])
    return int(stopped.value.code or 0)
