"""The picture of power against the number of subjects."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from robustrm.errors import ArgumentError
from robustrm.figures import describe_power, power
from robustrm.sizing import Sizing, sample_size

pytestmark = pytest.mark.figure


@pytest.fixture(scope="module")
def sizing() -> Sizing:
    return sample_size(
        cv_within=0.42, cv_between=0.9, ratios=[1, 0.7, 0.5], n=range(7, 16), rng=1, datasets=100
    )


def lines(axes) -> dict[str, Any]:
    return {str(line.get_label()): line for line in axes.lines if line.get_label()[0] != "_"}


def test_each_line_is_the_power_of_its_test(sizing: Sizing):
    axes = power(sizing)
    drawn = lines(axes)
    names = [label.rsplit(" (", 1)[0] for label in drawn]
    assert names == [
        "signed_rank, Holm: at least one",
        "signed_rank, Holm: occasion 2 vs occasion 1",
        "friedman",
        "paired_t, Holm: at least one",
    ]
    for name, line in zip(names, drawn.values(), strict=True):
        rows = sizing.table[sizing.table["test"] == name]
        np.testing.assert_array_equal(line.get_xdata(), rows["n"])
        np.testing.assert_array_equal(line.get_ydata(), rows["power"])


def test_bands_are_the_monte_carlo_intervals(sizing: Sizing):
    axes = power(sizing, tests=["friedman"])
    band: Any = axes.collections[0]
    rows = sizing.table[sizing.table["test"] == "friedman"]
    heights = band.get_paths()[0].vertices[:, 1]
    assert heights.min() == rows["low"].min()
    assert heights.max() == rows["high"].max()


def test_a_ring_marks_the_smallest_n_and_the_legend_names_it(sizing: Sizing):
    name = "signed_rank, Holm: at least one"
    smallest = sizing.smallest[name]
    assert smallest is not None
    axes = power(sizing, tests=[name])
    rings = [line for line in axes.lines if line.get_markersize() == 8]
    assert [np.asarray(line.get_xdata()).tolist() for line in rings] == [[smallest]]
    assert list(lines(axes)) == [f"{name} (n = {smallest})"]


def test_the_target_is_a_line_across(sizing: Sizing):
    axes = power(sizing)
    assert set(np.asarray(axes.lines[0].get_ydata())) == {0.8}
    assert "target 0.8" in [text.get_text() for text in axes.texts]


def test_a_target_that_is_not_reached_has_no_ring(sizing: Sizing):
    name = "signed_rank, Holm: occasion 2 vs occasion 1"
    assert sizing.smallest[name] is None
    axes = power(sizing, tests=[name])
    assert [line for line in axes.lines if line.get_markersize() == 8] == []
    assert list(lines(axes)) == [f"{name} (target not reached)"]


def test_an_unknown_test_is_refused(sizing: Sizing):
    with pytest.raises(ArgumentError, match=r"`tests` must be one of .* got 'fridman'"):
        power(sizing, tests=["fridman"])


def test_the_words_hold_the_numbers_of_the_picture(sizing: Sizing):
    words = describe_power(sizing)
    assert words.startswith("Power against 7 to 15 subjects with 95% Monte Carlo bands, target 0.8")
    last = sizing.power_at("friedman", 15)[0]
    assert f"to {last:.2f}" in words
