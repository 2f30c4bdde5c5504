"""robustrm: nonparametric and robust within-subject analysis for skewed biomarker data.

The main job in three lines::

    import robustrm as rm

    table = rm.read_table("calprotectin.csv", subject="patient", occasions=["week 0", ...])
    rm.analyze(table).write_report("report")
"""

from robustrm.advice import Advice, Diagnostics, advise, diagnose
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
from robustrm.methods.bootstrap_interval import bootstrap_interval, bootstrap_replicates
from robustrm.methods.effects import (
    Effect,
    geometric_mean_ratio,
    kendall_w,
    median_difference,
    percent_change,
    probability_of_fall,
    rank_biserial,
    relative_effects,
    robust_standardized_difference,
    standardized_mean_difference,
)
from robustrm.methods.follow_up import follow_up
from robustrm.methods.friedman import friedman
from robustrm.methods.hotelling import hotelling
from robustrm.methods.mean_permutation import mean_permutation
from robustrm.methods.normal_scores import normal_scores
from robustrm.methods.null_distribution import NullDistribution, null_distribution
from robustrm.methods.page_trend import page_trend
from robustrm.methods.paired_t import paired_t
from robustrm.methods.quade import quade
from robustrm.methods.rank_anova import rank_anova
from robustrm.methods.rank_pair import rank_pair
from robustrm.methods.row_flip import row_flip
from robustrm.methods.sign_flip import sign_flip
from robustrm.methods.sign_test import sign_test
from robustrm.methods.signed_rank import signed_rank
from robustrm.methods.skillings_mack import skillings_mack
from robustrm.methods.trimmed_anova import trimmed_anova
from robustrm.methods.trimmed_difference import trimmed_difference
from robustrm.methods.trimmed_pair import trimmed_pair
from robustrm.methods.winsorized_permutation import winsorized_permutation
from robustrm.plan import Plan
from robustrm.reading import read_table
from robustrm.results import Comparison, Estimate, FollowUps, Note, TestResult
from robustrm.sensitivity_analysis.reference_change import reference_change
from robustrm.sensitivity_analysis.reference_changes import ReferenceChanges, reference_changes
from robustrm.sensitivity_analysis.running import Sensitivity, sensitivity
from robustrm.sizing import Sizing, sample_size
from robustrm.table import OccasionTable

__version__ = "0.1.0"

__all__ = [
    "Advice",
    "Analysis",
    "ArgumentError",
    "Attainable",
    "BudgetError",
    "Comparison",
    "DataError",
    "Diagnostics",
    "Effect",
    "Estimate",
    "FollowUps",
    "Note",
    "NullDistribution",
    "OccasionTable",
    "Plan",
    "PlanError",
    "Problem",
    "ReferenceChanges",
    "RobustrmError",
    "Sensitivity",
    "Sizing",
    "TestResult",
    "TooFewError",
    "advise",
    "aligned_ranks",
    "analyze",
    "anova",
    "attainable",
    "bootstrap_interval",
    "bootstrap_replicates",
    "diagnose",
    "follow_up",
    "friedman",
    "geometric_mean_ratio",
    "hotelling",
    "kendall_w",
    "mean_permutation",
    "median_difference",
    "normal_scores",
    "null_distribution",
    "page_trend",
    "paired_t",
    "percent_change",
    "probability_of_fall",
    "quade",
    "rank_anova",
    "rank_biserial",
    "rank_pair",
    "read_table",
    "reference_change",
    "reference_changes",
    "relative_effects",
    "robust_standardized_difference",
    "row_flip",
    "sample_size",
    "sensitivity",
    "sign_flip",
    "sign_test",
    "signed_rank",
    "skillings_mack",
    "standardized_mean_difference",
    "trimmed_anova",
    "trimmed_difference",
    "trimmed_pair",
    "winsorized_permutation",
]
