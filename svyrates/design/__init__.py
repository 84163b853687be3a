"""What the survey is: weights, strata, stages, and the checks on them."""

from svyrates.design.sample_design import SampleDesign
from svyrates.design.summary import DesignSummary

__all__ = ["DesignSummary", "SampleDesign"]
