"""Every published case: the value found, or the reason why it is not looked for.

Each test is named after its case, the field compared and the source.
"""

from __future__ import annotations

import re
from collections import Counter
from pathlib import Path

import pytest

from tests.reference import (
    checks_additive,
    checks_omnibus,
    checks_other,
    checks_pairs,
    checks_rank_sums,
)
from tests.reference.cases import Check, agrees, all_cases, leaves, not_used

pytestmark = pytest.mark.reference

ROOT = Path(__file__).resolve().parents[2]
CHECKS = (
    *checks_omnibus.CHECKS,
    *checks_additive.CHECKS,
    *checks_pairs.CHECKS,
    *checks_other.CHECKS,
    *checks_rank_sums.CHECKS,
)


@pytest.mark.parametrize("check", CHECKS, ids=str)
def test_the_package_finds_the_value_of_the_source(check: Check):
    found = check.find()
    assert agrees(found, check.expected, printed=check.is_published), (found, check.expected)


@pytest.mark.parametrize("name", [n for n in all_cases() if n not in not_used()["elsewhere"]])
def test_every_field_of_a_case_is_checked_or_its_absence_explained(name: str):
    claimed = [c.field for c in CHECKS if c.case == name]
    claimed += [key.split(":")[1] for key in not_used()["fields"] if key.startswith(f"{name}:")]

    def owners(leaf: str) -> list[str]:
        return [c for c in claimed if leaf == c or leaf.startswith((f"{c}/", f"{c}."))]

    counts = {leaf: len(owners(leaf)) for leaf in leaves(name)}
    assert {leaf: n for leaf, n in counts.items() if n != 1} == {}
    used = {owner for leaf in counts for owner in owners(leaf)}
    assert set(claimed) - used == set(), "a reason or a check for a field that the case has not"


def test_no_field_is_checked_twice():
    counts = Counter((check.case, check.field) for check in CHECKS)
    assert [key for key, count in counts.items() if count > 1] == []


def test_published_values_are_relied_on_only_where_source_and_recomputation_agree():
    for check in CHECKS:
        if check.is_published:
            assert all_cases()[check.case].agree, check


def test_every_reason_is_a_sentence():
    for reasons in not_used().values():
        for key, reason in reasons.items():
            assert len(reason.split()) > 2, key
            assert reason.endswith("."), key


def test_a_case_is_either_here_or_listed_as_not_used():
    assert set(all_cases()) & set(not_used()["cases"]) == set()
    assert set(not_used()["elsewhere"]) <= set(all_cases())


def test_a_case_is_named_as_its_file():
    assert {name: entry.id for name, entry in all_cases().items() if entry.id != name} == {}


def test_a_case_that_is_compared_elsewhere_is_read_there():
    for name, reason in not_used()["elsewhere"].items():
        (path,) = re.findall(r"tests/\S+\.py", reason)
        assert f'"{name}"' in (ROOT / path).read_text(encoding="utf-8")


def test_a_printed_number_is_held_to_its_own_digits():
    assert agrees(3.1922, 3.19, printed=True)
    assert not agrees(3.1951, 3.19, printed=True)
    assert not agrees(23.5, 24, printed=True)
    assert not agrees(3.1922, 3.19, printed=False)
    assert not agrees({"a": 1.0}, {"b": 1.0}, printed=False)
    assert not agrees(1.0, None, printed=False)
