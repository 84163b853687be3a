"""One pass of additive sums over the records."""

from svyrates.tally.memory import Tally, tally_records
from svyrates.tally.replicates import ReplicateTally, tally_replicates

__all__ = ["ReplicateTally", "Tally", "tally_records", "tally_replicates"]
