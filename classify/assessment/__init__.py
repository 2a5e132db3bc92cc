"""Accuracy and areas from a labelled reference sample, design-based, each with its uncertainty and its evidence."""

from classify.assessment.compare import Comparison, compare, compare_sample, write_comparison
from classify.assessment.evidence import EVIDENCE, Evidence
from classify.assessment.frames import assess, assess_matrix, write_assessment
from classify.assessment.intervals import Estimate
from classify.assessment.options import AssessmentOptions
from classify.assessment.reference import assess_project, compare_project, read_reference
from classify.assessment.result import AreaEstimate, Assessment, StratumSummary
from classify.assessment.sample import ReferenceSample, Stratum

__all__ = [
    "EVIDENCE",
    "AreaEstimate",
    "Assessment",
    "AssessmentOptions",
    "Comparison",
    "Estimate",
    "Evidence",
    "ReferenceSample",
    "Stratum",
    "StratumSummary",
    "assess",
    "assess_matrix",
    "assess_project",
    "compare",
    "compare_project",
    "compare_sample",
    "read_reference",
    "write_assessment",
    "write_comparison",
]
