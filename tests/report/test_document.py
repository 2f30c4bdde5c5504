"""The document holds everything, unrounded, and nothing that shuffling could move."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import pytest

from robustrm.analysis import Analysis, analyze
from robustrm.plan import Plan
from robustrm.report.document import SCHEMA, SCHEMA_VERSION, document
from robustrm.report.json_text import json_text
from robustrm.table import OccasionTable


def walk(value: Any) -> list[Any]:
    if isinstance(value, dict):
        return [leaf for item in value.values() for leaf in walk(item)]
    if isinstance(value, list):
        return [leaf for item in value for leaf in walk(item)]
    return [value]


def test_the_document_is_plain_and_finite(varied: Analysis):
    held = document(varied)
    for leaf in walk(held):
        assert leaf is None or type(leaf) in (str, int, float, bool)
        assert not isinstance(leaf, float) or math.isfinite(leaf)
    assert json.loads(json_text(held)) == held


def test_the_document_says_what_it_is(analysis: Analysis):
    held = document(analysis)
    assert (held["schema"], held["schema_version"]) == (SCHEMA, SCHEMA_VERSION)
    assert list(held)[:2] == ["schema", "schema_version"]
    assert list(held)[-1] == "record"


def test_json_text_is_strict_and_ends_with_a_newline(analysis: Analysis):
    text = json_text(document(analysis))
    assert text.endswith("}\n")
    with pytest.raises(ValueError, match="not JSON compliant"):
        json_text({"p": math.nan})


def test_numbers_are_the_results_own(analysis: Analysis):
    held = document(analysis)
    for comparison, kept in zip(analysis.primary, held["primary"]["comparisons"], strict=True):
        assert kept["result"]["p_value"] == comparison.p_value
        assert kept["p_adjusted"] == comparison.p_adjusted
        assert comparison.estimate is not None
        assert kept["estimate"]["value"] == comparison.estimate.value
        assert kept["estimate"]["low"] == comparison.estimate.low
    assert analysis.omnibus is not None
    assert held["omnibus"]["result"]["statistic"] == analysis.omnibus.statistic


def test_shuffling_rows_changes_nothing_outside_the_record(analysis: Analysis):
    table = analysis.table
    order = np.random.default_rng(5).permutation(table.n_subjects).tolist()
    shuffled = OccasionTable.from_array(
        table.values[order],
        occasions=table.occasions,
        subjects=[table.subjects[i] for i in order],
        marker=table.marker,
        unit=table.unit,
        below=table.below[order],
        lower_limit=table.lower_limit[order],
    )
    one, other = document(analysis), document(analyze(shuffled, analysis.plan))
    assert one.pop("record") == other.pop("record")
    assert one == other


def test_what_differs_between_machines_is_in_the_record_alone(analysis: Analysis):
    held = document(analysis)
    record = held.pop("record")
    outside = json_text(held)
    told = [record["platform"], record["plan_digest"], *record["versions"].values()]
    assert [text for text in told if f'"{text}"' in outside] == []


def test_rows_tell_in_what_they_differ_from_the_planned_one():
    rng = np.random.default_rng(2)
    values = np.round(np.exp(rng.normal(1, 0.7, (9, 3))), 2)
    values[0, 1] = np.nan
    table = OccasionTable.from_array(values, occasions=["a", "b", "c"])
    held = document(analyze(table, Plan(seed=1)))
    apart = {(row["label"], row["result"]["scale"]): row["apart"] for row in held["beside"]}
    assert apart["b vs a", "log"] == ["estimand"]
    assert apart["b vs a", "raw"] == ["scale", "estimand"]
    assert [row["apart"] for row in held["primary"]["comparisons"]] == [[], []]


def test_inclusion_adds_up_to_every_n(varied: Analysis):
    held = document(varied)
    rows = [*held["primary"]["comparisons"], *([held["omnibus"]] if held["omnibus"] else []),
            *held["supplementary"], *held["beside"]]  # fmt: skip
    sizes = {entry["analysis"]: entry["n"] for entry in held["inclusion"]["analyses"]}
    for row in rows:
        name = f"{row['title']}, {row['result']['scale']} scale: {row['label']}"
        assert sizes[name] == row["result"]["n_subjects"]
    left = len(held["inclusion"]["left"])
    assert left == sum(held["study"]["n_subjects"] - n for n in sizes.values())
    assert all(entry["reason"] for entry in held["inclusion"]["left"])


def test_order_statistics_say_on_which_side_of_a_limit_they_lie():
    table = OccasionTable.from_array(
        [[0.3, 1.0], [0.3, 2.0], [0.3, 3.0], [4.0, 9.0], [5.0, 9.0]],
        occasions=["a", "b"],
        below=[[True, False]] * 3 + [[False, False]] * 2,
        above=[[False, False]] * 3 + [[False, True]] * 2,
    )
    first, second = document(analyze(table, Plan(seed=1)))["summary"]
    assert first["beyond"] == {
        "smallest": "below", "q1": "below", "median": "below", "q3": None, "largest": None,
    }  # fmt: skip
    assert second["beyond"]["largest"] == "above"
    assert second["beyond"]["median"] is None
    assert (first["lower_limit"], second["upper_limit"]) == (0.3, 9.0)
    assert first["median"] is None
    assert second["median"] == 3.0
