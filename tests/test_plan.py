"""The plan: its defaults, its file, its digest, and what it refuses."""

from __future__ import annotations

import dataclasses
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

import robustrm as rm
from robustrm.methods.registry import METHODS, P_ADJUSTMENTS

# The defaults that the package promises; a change of one is a change of every default analysis.
DEFAULTS = {
    "marker_kind": "concentration",
    "scale": None,
    "contrasts": "first",
    "pair": "signed_rank",
    "zeros": "pratt",
    "adjust": "holm",
    "intervals": "separate",
    "level": 0.95,
    "sides": 2,
    "substitute": "half",
    "in_time": True,
    "stages": (9_999, 99_999, 999_999),
    "seed": None,
}

LABEL = st.text(min_size=1, max_size=6).filter(str.strip)
PAIRS = st.lists(st.lists(LABEL, min_size=2, max_size=2, unique=True), min_size=1, max_size=3)
PLANS = st.builds(
    rm.Plan,
    marker_kind=st.sampled_from(["concentration", "count", "score"]),
    scale=st.sampled_from([None, "raw", "log"]),
    contrasts=st.one_of(st.sampled_from(["first", "all", "successive"]), PAIRS),
    zeros=st.sampled_from(["pratt", "drop"]),
    adjust=st.sampled_from(P_ADJUSTMENTS),
    intervals=st.sampled_from(["separate", "simultaneous"]),
    level=st.floats(0.001, 0.999),
    sides=st.sampled_from([1, 2]),
    direction=st.sampled_from(["greater", "less"]),
    substitute=st.sampled_from(["half", "root2", "limit"]),
    in_time=st.booleans(),
    purpose=st.sampled_from(["exploratory", "confirmatory"]),
    design=st.sampled_from(["single-arm", "randomised-order"]),
    selected=st.sampled_from([None, True, False]),
    own_runs=st.sampled_from([None, True, False]),
    grid=st.fixed_dictionaries(
        {},
        optional={
            "scale": st.lists(st.sampled_from(["log", "raw"]), min_size=1, unique=True),
            "trim": st.lists(st.floats(0, 0.49), min_size=1, max_size=3, unique=True),
            "replicates": st.lists(st.sampled_from(["mean", "geometric"]), unique=True),
            "draws": st.integers(99, 10**6),
        },
    ),
    stages=st.sets(st.integers(99, 10**7), min_size=1, max_size=3).map(lambda s: tuple(sorted(s))),
    seed=st.one_of(st.none(), st.integers(0, 2**62)),
)


def test_every_default_is_the_promised_one():
    plan = rm.Plan()
    assert {name: getattr(plan, name) for name in DEFAULTS} == DEFAULTS


def test_the_default_methods_are_on_offer():
    kinds = {method.name: method.kind for method in METHODS}
    assert kinds[rm.Plan().pair] == "pair"
    assert kinds[rm.Plan().omnibus] == "omnibus"


@pytest.mark.parametrize(
    ("kind", "declared", "used"),
    [
        ("concentration", None, "log"),
        ("count", None, "raw"),
        ("score", None, "raw"),
        ("concentration", "raw", "raw"),
        ("count", "log", "log"),
    ],
)
def test_the_scale_is_the_declared_one_or_follows_the_kind_of_marker(kind, declared, used):
    assert rm.Plan(marker_kind=kind, scale=declared).used_scale == used


def test_one_sided_plans_state_their_direction():
    assert rm.Plan().alternative == "two-sided"
    assert rm.Plan(sides=1, direction="less").alternative == "less"


# ── the file ──────────────────────────────────────────────────────────────────────────────────


@pytest.mark.property
@given(plan=PLANS)
def test_a_plan_comes_back_from_its_file(plan, tmp_path_factory):
    path = tmp_path_factory.mktemp("plan") / "plan.toml"
    plan.save(path)
    loaded = rm.Plan.load(path)
    assert loaded == plan
    assert loaded.digest == plan.digest
    assert [p.name for p in path.parent.iterdir()] == ["plan.toml"]


@pytest.mark.property
@given(one=PLANS, other=PLANS)
def test_equal_plans_and_only_they_have_equal_digests(one, other):
    assert (one == other) == (one.digest == other.digest)
    assert re.fullmatch("[0-9a-f]{64}", one.digest)


def test_every_key_moves_the_digest():
    plan = rm.Plan(scale="log", seed=1)
    changes = {
        "marker_kind": "count", "scale": "raw", "contrasts": "all", "pair": "paired_t",
        "omnibus": "anova", "zeros": "drop", "adjust": "hommel", "intervals": "simultaneous",
        "level": 0.9, "sides": 1, "direction": "less", "substitute": "limit", "in_time": False,
        "purpose": "confirmatory", "design": "randomised-order", "stages": (99,), "seed": 2,
        "marker": "CRP", "unit": "mg/L", "occasions": ("a", "b"), "lower_limit": 0.3,
        "upper_limit": (20.0, None), "estimand": "the ratio in all who started",
        "companions": ("sign_test",), "missing": "complete", "margin": 1.25,
        "margin_reason": "agreed beforehand", "trim": 0.1, "winsorize": 0.2,
        "bootstrap_draws": 999, "created": "2026-03-04", "data_digest": "0" * 64,
        "amendments": ("one",), "grid": {"scale": ["log"]}, "selected": True, "own_runs": False,
    }  # fmt: skip
    assert {f.name for f in dataclasses.fields(rm.Plan)} <= set(changes)
    plan = plan.replace(margin=2.0, margin_reason="a first guess")
    digests = {plan.replace(**{name: value}).digest for name, value in changes.items()}
    assert len(digests | {plan.digest}) == len(changes) + 1


def test_pairs_may_be_given_as_lists_and_are_kept_as_tuples():
    plan = rm.Plan().replace(contrasts=[["week 0", "week 6"]])
    assert plan.contrasts == (("week 0", "week 6"),)
    assert hash(plan) == hash(rm.Plan(contrasts=(("week 0", "week 6"),)))


def test_replacing_leaves_the_plan_as_it_was():
    plan = rm.Plan()
    assert plan.replace(level=0.9).level == 0.9
    assert plan.level == 0.95
    with pytest.raises(dataclasses.FrozenInstanceError):
        plan.level = 0.9  # type: ignore[misc]  # it is read-only


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("adjsut = 'holm'", r"The plan has no key 'adjsut'\. Did you mean 'adjust'\?"),
        ("colour = 'blue'", r"The plan has no key 'colour'\. Keys are: marker, unit, "),
        ("level = 95", r"'p\.toml' is refused: `level` must be in \(0, 1\), got 95\. .* 0\.95\?"),
        ("adjust = 'holn'", r"`adjust` must be one of .* got 'holn'\. Did you mean 'holm'\?"),
        ("contrasts = [['a', 'a']]", "`contrasts` must be one of 'first', 'all', 'successive' or"),
        ("seed = -1", "`seed` must be a whole number of at least 0, got -1"),
        ("level = ", r"The plan 'p\.toml' is not valid TOML"),
    ],
)
def test_a_file_that_is_not_understood_is_refused_whole(text, message, tmp_path):
    path = tmp_path / "p.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(rm.PlanError, match=message):
        rm.Plan.load(path)


def test_a_file_that_is_not_there_or_not_text_is_refused(tmp_path):
    with pytest.raises(rm.PlanError, match=r"The plan 'none\.toml' cannot be read: No such file"):
        rm.Plan.load(tmp_path / "none.toml")
    (tmp_path / "p.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(rm.PlanError, match="is not valid TOML"):
        rm.Plan.load(tmp_path / "p.toml")


# ── values outside their range ────────────────────────────────────────────────────────────────


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"marker_kind": "concentraton"}, r"`marker_kind` must be .*mean 'concentration'\?"),
        ({"scale": "ln"}, "`scale` must be one of 'raw', 'log', got 'ln'"),
        ({"contrasts": "frist"}, r"`contrasts` must be one of .* Did you mean 'first'\?"),
        ({"contrasts": ()}, "`contrasts` must be one of .* or pairs of two different occasions"),
        ({"contrasts": [("a", "b", "c")]}, "pairs of two different occasions"),
        ({"pair": "friedman"}, "`pair` must be one of 'signed_rank'"),
        ({"pair": "signed_ranks"}, r"Did you mean 'signed_rank'\?"),
        ({"pair": "nemenyi"}, "`adjust` must be 'single-step' with `pair` 'nemenyi', got 'holm'"),
        ({"adjust": "single-step"}, "`pair` must be 'nemenyi' or 'conover' with `adjust` 'single"),
        (
            {"pair": "conover", "adjust": "single-step", "sides": 1},
            "`sides` must be 2 with `pair` 'conover', got 1",
        ),
        ({"pair": "nemeny"}, r"`pair` must be one of .* Did you mean 'nemenyi'\?"),
        ({"omnibus": "paired_t"}, "`omnibus` must be one of 'friedman'"),
        ({"zeros": "keep"}, "`zeros` must be one of 'pratt', 'drop', got 'keep'"),
        ({"intervals": "joint"}, "`intervals` must be one of"),
        ({"level": 0}, r"`level` must be in \(0, 1\), got 0\."),
        ({"level": 1.0}, r"`level` must be in \(0, 1\), got 1\.0"),
        ({"level": True}, r"`level` must be in \(0, 1\), got True"),
        ({"sides": 3}, "`sides` must be 1 or 2, got 3"),
        ({"sides": True}, "`sides` must be 1 or 2, got True"),
        ({"direction": "up"}, "`direction` must be one of 'greater', 'less', got 'up'"),
        ({"substitute": "zero"}, "`substitute` must be one of 'half', 'root2', 'limit'"),
        ({"in_time": "yes"}, "`in_time` must be true or false, got 'yes'"),
        ({"purpose": "pilot"}, "`purpose` must be one of 'exploratory', 'confirmatory'"),
        ({"design": "parallel"}, "`design` must be one of 'single-arm', 'randomised-order'"),
        ({"stages": (999, 99)}, "`stages` must be rising whole numbers of at least 99"),
        ({"stages": ()}, "`stages` must be rising whole numbers of at least 99"),
        ({"stages": (10,)}, "`stages` must be rising whole numbers of at least 99"),
        ({"seed": 1.5}, "`seed` must be a whole number of at least 0, got 1.5"),
        ({"seed": True}, "`seed` must be a whole number of at least 0, got True"),
    ],
)
def test_a_value_outside_its_range_is_refused_with_the_rule(changes, message):
    with pytest.raises(rm.ArgumentError, match=message):
        rm.Plan().replace(**changes)


def test_an_unknown_key_is_refused_with_the_nearest():
    with pytest.raises(rm.ArgumentError, match=r"no key 'intervalls'\. Did you mean 'intervals'\?"):
        rm.Plan().replace(intervalls="separate")


# ── what was written when, and what was changed afterwards ────────────────────────────────────


def test_a_change_of_what_was_planned_is_an_amendment():
    plan = rm.Plan(adjust="hommel", created="2026-03-04")
    changed = plan.amended(adjust="none", level=0.95, marker="CRP")
    assert changed.adjust == "none"
    # the level is as planned, and the marker was left open: filled in, not changed
    assert changed.amendments == ("adjust: 'hommel' was planned, 'none' was used",)
    assert changed.marker == "CRP"
    assert changed.amended(seed=4).amendments == changed.amendments
    assert len(changed.amended(trim=0.1).amendments) == 2


def test_limits_of_the_occasions_survive_the_file(tmp_path):
    plan = rm.Plan(occasions=("a", "b", "c"), lower_limit=(0.3, None, 0.5), upper_limit=20)
    assert plan.lower_limit == (0.3, None, 0.5)
    plan.save(tmp_path / "plan.toml")
    assert rm.Plan.load(tmp_path / "plan.toml") == plan


def test_a_grid_is_a_table_of_the_file_and_keeps_the_defaults_of_the_keys_it_leaves_out(tmp_path):
    path = tmp_path / "plan.toml"
    path.write_text('level = 0.9\n\n[grid]\nscale = ["log"]\ntrim = [0]\n', encoding="utf-8")
    plan = rm.Plan.load(path)
    assert (plan.grid.scale, plan.grid.trim) == (("log",), (0.0,))
    assert plan.grid.test == rm.Plan().grid.test
    same = rm.Plan().replace(level=0.9, grid={"scale": ["log"], "trim": [0]})
    assert hash(plan) == hash(same)
    told = plan.amended(grid={"scale": ["raw"]}).amendments
    assert "['log']" in told[0]
    assert "['raw']" in told[0]


@pytest.mark.parametrize(
    ("keys", "message"),
    [
        ({"occasions": ("a", "a")}, "`occasions` must not repeat a name"),
        ({"occasions": "abc"}, "`occasions` must be a list of names"),
        ({"lower_limit": "0.3"}, "`lower_limit` must be a number, or one an occasion"),
        (
            {"occasions": ("a", "b"), "upper_limit": (1.0,)},
            "one number for each of the 2 occasions, got 1",
        ),
        ({"margin": -1, "margin_reason": "x"}, "`margin` must be a positive number, got -1"),
        ({"margin": 1.25}, "`margin` needs `margin_reason`"),
        ({"created": "yesterday"}, "`created` must be a date as text"),
        ({"data_digest": "abc"}, "`data_digest` must be a SHA-256"),
        ({"estimand": "  "}, "`estimand` must be a text"),
        ({"trim": 20}, r"`trim` must be in \[0, 0.5\), got 20\. Did you mean 0.2\?"),
        ({"companions": ("page_trend",)}, "`companions` must be one of .*got 'page_trend'"),
        ({"grid": {"scal": ["log"]}}, r"`grid` has no key 'scal'\. Did you mean 'scale'\?"),
        ({"grid": {"colour": 1}}, r"`grid` has no key 'colour'\. Keys are: scale, test, trim"),
        ({"grid": {"test": ["fridman"]}}, r"`grid\.test` must be .* Did you mean 'friedman'\?"),
        ({"grid": {"scale": "log"}}, r"`grid\.scale` must be a list of names.* \['log'\]"),
        ({"grid": {"scale": []}}, r"`grid\.scale` must hold at least 1 names, got 0"),
        ({"grid": {"trim": 0.2}}, r"`grid\.trim` must be a list of shares, got 0\.2"),
        ({"grid": {"trim": [20]}}, r"`grid\.trim` must be in \[0, 0\.5\), got 20\. .* 0\.2\?"),
        ({"grid": {"trim": [0.1, 0.1]}}, r"`grid\.trim` must not repeat a share"),
        ({"grid": {"draws": 10}}, r"`grid\.draws` must be a whole number of at least 99, got 10"),
        ({"grid": ["log"]}, r"`grid` must be a table of choices, got \['log'\]"),
        ({"selected": "yes"}, "`selected` must be true, false or left out"),
        ({"own_runs": 1}, "`own_runs` must be true, false or left out .* got 1"),
        ({"missing": "drop"}, "`missing` must be one of 'available', 'complete'"),
    ],
)
def test_a_key_outside_its_range_is_refused(keys, message):
    with pytest.raises(rm.ArgumentError, match=message):
        rm.Plan(**keys)
