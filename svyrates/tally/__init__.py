"""One pass of additive sums over the records."""

from svyrates.tally.memory import Tally, tally_records

__all__ = ["Tally", "tally_records"]
