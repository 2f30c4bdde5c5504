"""The list of methods: one line each, in the order in which a reader meets them.

The tuple is literal on purpose: what is offered can be read here, and nothing registers
itself by being imported. `Method.load` imports the file of the method when it is used.
"""

from __future__ import annotations

import importlib
from collections.abc import Callable
from dataclasses import dataclass
from types import ModuleType
from typing import Literal

from robustrm.results import TestResult

Kind = Literal["omnibus", "pair", "family"]

FAMILIES = ("first", "all", "successive")
P_ADJUSTMENTS = ("none", "bonferroni", "holm", "hochberg", "hommel", "bh")
ADJUSTMENTS = (*P_ADJUSTMENTS, "closed", "single-step")
CLOSED_METHODS = ("sign_flip", "aligned_ranks")
SINGLE_STEP_METHODS = ("nemenyi", "conover")


@dataclass(frozen=True, slots=True)
class Method:
    """A method on offer.

    Parameters
    ----------
    name : str
        Name of the function, of its file in ``robustrm.methods`` and of its docs page.
    kind : {"omnibus", "pair", "family"}
        Whether it compares all occasions, two, or a whole family of pairs with an adjustment
        of its own; the last goes through ``follow_up``.
    title : str
        Usual name of the method.
    question : str
        The question it answers, as a sentence.
    null : str
        The null hypothesis in words.
    uses : {"values", "ranks"}
        What of the data it uses: results by ranks do not change under any monotone transform.
    exchangeable : bool
        Whether its null hypothesis is that each subject's occasions are exchangeable, so that
        its null distribution is that of rearranging each subject's own values.
    options : tuple of str
        Keyword options that the function takes.
    requires : tuple of str
        Those among them that have no default: a plan cannot name such a method on its own.
    is_additive : bool
        Whether the test is a sum of scores with a null distribution on the engine.
    file : str
        Its file, where that is not called as the method.
    """

    name: str
    kind: Kind
    title: str
    question: str
    null: str
    uses: Literal["values", "ranks"]
    exchangeable: bool
    options: tuple[str, ...]
    requires: tuple[str, ...] = ()
    is_additive: bool = True
    file: str = ""

    def load(self) -> Callable[..., TestResult]:
        """Return the function; that of a family gives its comparisons, not one result."""
        function: Callable[..., TestResult] = getattr(self.module(), self.name)
        return function

    def module(self) -> ModuleType:
        """Return the file of the method; an additive test has `problem` in it."""
        return importlib.import_module(f"robustrm.methods.{self.file or self.name}")


_ORDERS = "every order of a subject's values over the occasions is equally likely"
_NULL = ("null", "draws", "thresholds", "rng")

METHODS: tuple[Method, ...] = (
    Method(
        "friedman",
        "omnibus",
        "Friedman test",
        "Do the occasions tend to rank alike within subjects?",
        _ORDERS,
        "ranks",
        True,
        _NULL,
    ),
    Method(
        "quade",
        "omnibus",
        "Quade test",
        "Do the occasions rank alike, weighted by how much each subject varies?",
        _ORDERS,
        "values",
        True,
        ("substitute", *_NULL),
    ),
    Method(
        "aligned_ranks",
        "omnibus",
        "Aligned-ranks test",
        "Do the occasions differ, by ranks of the subject-centred values?",
        _ORDERS,
        "values",
        True,
        ("substitute", *_NULL),
    ),
    Method(
        "normal_scores",
        "omnibus",
        "Normal-scores test",
        "Do the occasions rank alike within subjects, extreme ranks weighted?",
        _ORDERS,
        "ranks",
        True,
        _NULL,
    ),
    Method(
        "mean_permutation",
        "omnibus",
        "Permutation F test",
        "Do the occasion means differ, by permuting values within subjects?",
        _ORDERS,
        "values",
        True,
        ("substitute", *_NULL),
    ),
    Method(
        "winsorized_permutation",
        "omnibus",
        "Winsorized permutation test",
        "Do the occasions differ, with extreme subject-centred values pulled in?",
        _ORDERS,
        "values",
        True,
        ("winsorize", "substitute", *_NULL),
    ),
    Method(
        "row_flip",
        "omnibus",
        "Whole-row sign flip",
        "Do the occasions differ, whatever their spread and correlation?",
        "every subject's contrasts are symmetric about zero, whatever their covariance",
        "values",
        False,
        ("substitute", *_NULL),
    ),
    Method(
        "skillings_mack",
        "omnibus",
        "Skillings-Mack test",
        "Do the occasions rank alike within subjects, some visits missing?",
        _ORDERS + ", and visits are missing for unrelated reasons",
        "ranks",
        True,
        _NULL,
    ),
    Method(
        "page_trend",
        "omnibus",
        "Page trend test",
        "Do the values rise over the occasions in a stated order?",
        _ORDERS,
        "ranks",
        True,
        ("order", "scores", "alternative", *_NULL),
        ("order",),
    ),
    Method(
        "trimmed_anova",
        "omnibus",
        "Trimmed-mean analysis of variance",
        "Do the trimmed means of the occasions differ, whatever their spread and correlation?",
        "the occasions have equal trimmed means",
        "values",
        False,
        ("trim", "substitute", "null", "draws", "rng"),
        is_additive=False,
    ),
    Method(
        "rank_anova",
        "omnibus",
        "Rank ANOVA-type test",
        "Do the marginal distributions of the occasions differ, whatever their dependence?",
        "the occasions have equal marginal distributions",
        "ranks",
        False,
        ("level",),
        is_additive=False,
    ),
    Method(
        "hotelling",
        "omnibus",
        "Hotelling's T² test",
        "Do the occasion means differ, whatever their covariance, under a normal model?",
        "the occasions have equal means",
        "values",
        False,
        ("substitute",),
        is_additive=False,
    ),
    Method(
        "anova",
        "omnibus",
        "Within-subject analysis of variance",
        "Do the occasion means differ, under a normal model?",
        "the occasions have equal means",
        "values",
        False,
        ("substitute",),
        is_additive=False,
    ),
    Method(
        "signed_rank",
        "pair",
        "Wilcoxon signed-rank test",
        "Did the values shift between two occasions, by direction and size?",
        "the differences are symmetric about zero",
        "values",
        True,
        ("alternative", "zeros", "substitute", "level", *_NULL),
    ),
    Method(
        "sign_test",
        "pair",
        "Sign test",
        "Do more subjects rise than fall between two occasions?",
        "a rise and a fall are equally likely",
        "ranks",
        True,
        ("alternative", "level", *_NULL),
    ),
    Method(
        "sign_flip",
        "pair",
        "Sign-flip test",
        "Did the mean change between two occasions, by flipping signs?",
        "the differences are symmetric about zero",
        "values",
        True,
        ("alternative", "substitute", "level", *_NULL),
    ),
    Method(
        "trimmed_difference",
        "pair",
        "Trimmed-difference test",
        "Did the trimmed mean of the differences between two occasions move from zero?",
        "the trimmed mean of the differences is zero",
        "values",
        False,
        ("trim", "alternative", "substitute", "level"),
        is_additive=False,
    ),
    Method(
        "trimmed_pair",
        "pair",
        "Yuen's paired test",
        "Do the trimmed means of two occasions differ?",
        "the two occasions have equal trimmed means",
        "values",
        False,
        ("trim", "alternative", "substitute", "level"),
        is_additive=False,
    ),
    Method(
        "rank_pair",
        "pair",
        "Paired Brunner-Munzel test",
        "Does a value of one occasion tend to exceed one of the other, over all subjects?",
        "a value of the second occasion is as likely above one of the first as below",
        "ranks",
        False,
        ("alternative", "level", *_NULL),
        is_additive=False,
    ),
    Method(
        "paired_t",
        "pair",
        "Paired t test",
        "Does the mean difference between two occasions differ from zero, under a normal model?",
        "the mean difference is zero",
        "values",
        False,
        ("alternative", "substitute", "level"),
        is_additive=False,
    ),
    Method(
        "nemenyi",
        "family",
        "Nemenyi test",
        "Which occasions differ in mean rank, judged over all pairs together?",
        _ORDERS,
        "ranks",
        True,
        ("level",),
        is_additive=False,
        file="rank_sums",
    ),
    Method(
        "conover",
        "family",
        "Conover test",
        "Which occasions differ in mean rank over all pairs, given how well the subjects agree?",
        _ORDERS,
        "ranks",
        True,
        ("level",),
        is_additive=False,
        file="rank_sums",
    ),
)


def method(name: str) -> Method:
    """Return the registered method called `name`."""
    for candidate in METHODS:
        if candidate.name == name:
            return candidate
    raise KeyError(name)


_PEOPLE = (
    "Winsorized",
    "Friedman",
    "Wilcoxon",
    "Quade",
    "Page",
    "Skillings-Mack",
    "Hotelling",
    "Yuen",
    "Nemenyi",
    "Conover",
)


def in_sentence(title: str) -> str:
    """Return the name of a method inside a sentence: names of people keep their capital."""
    return title if title.startswith(_PEOPLE) else f"{title[:1].lower()}{title[1:]}"
