"""Figures show the numbers they are given, and nothing else of the caller's is touched."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from dunhamfit.show.figures import (
    corner_figure,
    draw_correlation,
    draw_quantiles,
    draw_residuals,
    draw_shifts,
    new_figure,
    normal_quantiles,
    save,
)


def test_plotted_residuals_are_those_given(rng):
    m, z, member = np.arange(-5, 5), rng.normal(size=10), np.array([0, 1] * 5)
    _, axes = new_figure()
    assert draw_residuals(axes, m, z, ("1-0", "2-1"), member) is axes
    for number, line in enumerate(axes.get_lines()[:2]):
        assert np.array_equal(line.get_xdata(), m[member == number])
        assert np.array_equal(line.get_ydata(), z[member == number])


def test_no_two_of_fifty_six_series_look_alike():
    _, axes = new_figure()
    labels = tuple(f"{v}-0" for v in range(1, 57))
    draw_residuals(axes, np.zeros(56), np.zeros(56), labels, np.arange(56))
    looks = {(line.get_color(), line.get_marker()) for line in axes.get_lines()[:56]}
    assert len(looks) == 56


def test_normal_quantiles_are_those_of_a_library():
    assert normal_quantiles(9) == pytest.approx(norm.ppf((np.arange(9) + 0.5) / 9), abs=1e-12)
    _, axes = new_figure()
    draw_quantiles(axes, normal_quantiles(9), np.arange(9.0))
    assert np.array_equal(axes.get_lines()[0].get_ydata(), np.arange(9.0))


def test_maps_and_shifts_name_their_constants(tmp_path):
    figure, axes = new_figure()
    draw_correlation(axes, np.array([[1.0, -0.5], [-0.5, 1.0]]), ("Y10", "Y20"))
    assert [label.get_text() for label in axes.get_yticklabels()] == ["Y10", "Y20"]
    for path in save(figure, tmp_path / "map"):
        assert path.stat().st_size > 1000
    _, axes = new_figure()
    draw_shifts(axes, ("Y10", "Y20"), np.array([0.3, -2.0]))
    assert np.array_equal(axes.get_lines()[0].get_ydata(), [0.3, -2.0])


def test_corner_labels_can_be_read_and_draws_stay_as_they_are(rng):
    draws = {"Y10": 760.0001 + 7e-5 * rng.normal(size=4000), "Y20": -2.7001 + 5e-5 * rng.normal(size=4000)}
    before = {name: values.copy() for name, values in draws.items()}
    figure = corner_figure(draws, {"Y10": "cm-1", "Y20": "cm-1"})
    labels = {text for axes in figure.axes for text in (axes.get_xlabel(), axes.get_ylabel()) if text}
    assert any(label.startswith("Y10 - 760.0001") and label.endswith("(1e-5 cm-1)") for label in labels)
    assert any(label.startswith("Y20 + 2.7") for label in labels)
    assert all(np.array_equal(draws[name], before[name]) for name in draws)
