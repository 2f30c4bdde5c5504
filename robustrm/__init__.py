"""robustrm: nonparametric and robust within-subject analysis for skewed biomarker data.

The main job in three lines::

    import robustrm as rm

    table = rm.read_table("calprotectin.csv", subject="patient", occasions=["week 0", ...])
    rm.analyze(table).write_report("report")
"""

from robustrm.analysis import Analysis, analyze
from robustrm.errors import (
    ArgumentError,
    BudgetError,
    DataError,
    PlanError,
    Problem,
    RobustrmError,
    TooFewError,
)
from robustrm.methods.aligned_ranks import aligned_ranks
from robustrm.methods.anova import anova
from robustrm.methods.attainable import Attainable, attainable
from robustrm.methods.follow_up import follow_up
from robustrm.methods.friedman import friedman
from robustrm.methods.mean_permutation import mean_permutation
from robustrm.methods.normal_scores import normal_scores
from robustrm.methods.null_distribution import NullDistribution, null_distribution
from robustrm.methods.page_trend import page_trend
from robustrm.methods.paired_t import paired_t
from robustrm.methods.quade import quade
from robustrm.methods.row_flip import row_flip
from robustrm.methods.sign_flip import sign_flip
from robustrm.methods.sign_test import sign_test
from robustrm.methods.signed_rank import signed_rank
from robustrm.methods.skillings_mack import skillings_mack
from robustrm.methods.winsorized_permutation import winsorized_permutation
from robustrm.plan import Plan
from robustrm.reading import read_table
from robustrm.results import Comparison, Estimate, FollowUps, Note, TestResult
from robustrm.table import OccasionTable

__version__ = "0.1.0"

__all__ = [
    "Analysis",
    "ArgumentError",
    "Attainable",
    "BudgetError",
    "Comparison",
    "DataError",
    "Estimate",
    "FollowUps",
    "Note",
    "NullDistribution",
    "OccasionTable",
    "Plan",
    "PlanError",
    "Problem",
    "RobustrmError",
    "TestResult",
    "TooFewError",
    "aligned_ranks",
    "analyze",
    "anova",
    "attainable",
    "follow_up",
    "friedman",
    "mean_permutation",
    "normal_scores",
    "null_distribution",
    "page_trend",
    "paired_t",
    "quade",
    "read_table",
    "row_flip",
    "sign_flip",
    "sign_test",
    "signed_rank",
    "skillings_mack",
    "winsorized_permutation",
]
