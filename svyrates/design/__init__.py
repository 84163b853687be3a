"""What the survey is: weights, strata, stages, and the checks on them."""

from svyrates.design.make_replicates import make_replicates
from svyrates.design.merge import merge_replicates
from svyrates.design.replicates import ReplicateWeights
from svyrates.design.sample_design import SampleDesign
from svyrates.design.summary import DesignSummary
from svyrates.design.waves import combine_waves

__all__ = [
    "DesignSummary",
    "ReplicateWeights",
    "SampleDesign",
    "combine_waves",
    "make_replicates",
    "merge_replicates",
]
