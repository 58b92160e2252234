"""Figures. Each function takes records and an Axes, draws, and returns the Axes; nothing is computed but the layout.

Colours are those of M. Okabe and K. Ito (2008), which colour-blind readers tell apart; every
series also has a marker of its own, so that a print in grey says the same.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import corner
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from scipy.special import ndtri

from dunhamfit.fit.record import Fit

_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000", "#8C6D00")
# One fewer than colours, so that no pair comes again among 56 series.
_MARKERS = ("o", "s", "^", "D", "v", "P", "X")
_SIZE = (7.0, 4.5)  # inches: one column and a half of a journal page
# Names of more terms than this would run into each other on the axes of a map.
_NAMES_AT_MOST = 40


def new_figure(*, width: float = _SIZE[0], height: float = _SIZE[1]) -> tuple[Figure, Axes]:
    """A figure with one Axes, apart from any display; inches."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure, figure.add_subplot()


def save(figure: Figure, stem: Path) -> tuple[Path, Path]:
    """Write a figure as PDF and as PNG (200 dots an inch); the paths written."""
    paths = stem.with_suffix(".pdf"), stem.with_suffix(".png")
    # Without the date the same figure gives the same bytes.
    figure.savefig(paths[0], metadata={"CreationDate": None}, bbox_inches="tight")
    figure.savefig(paths[1], dpi=200, bbox_inches="tight")
    return paths


def draw_residuals(axes: Axes, m: np.ndarray, z: np.ndarray, labels: Sequence[str], member: np.ndarray) -> Axes:
    """Residuals in units of their sigma against m (P branch -J'', R branch J'' + 1), a series for each band.

    Parameters
    ----------
    axes : Axes
    m, z : ndarray of float, shape (lines,)
    labels : sequence of str
        Names of the bands.
    member : ndarray of int, shape (lines,)
        Index of each line's band.
    """
    for number, label in enumerate(labels):
        of_band = member == number
        style = {"color": _COLOURS[number % len(_COLOURS)], "marker": _MARKERS[number % len(_MARKERS)]}
        axes.plot(m[of_band], z[of_band], linestyle="none", markersize=3, label=label, **style)
    axes.axhline(0.0, color="0.4", linewidth=0.8)
    axes.set_xlabel("m")
    axes.set_ylabel("(observed - calculated) / sigma")
    if len(labels) > 1:
        columns = 1 if len(labels) <= 20 else 2
        axes.legend(fontsize=6, ncols=columns, loc="center left", bbox_to_anchor=(1.0, 0.5), frameon=False)
    return axes


def draw_quantiles(axes: Axes, expected: np.ndarray, z: np.ndarray) -> Axes:
    """Sorted residuals in sigma against the quantiles of the normal distribution, both of shape (lines,)."""
    axes.plot(expected, z, linestyle="none", marker="o", markersize=2.5, color=_COLOURS[0])
    reach = float(np.max(np.abs(expected), initial=1.0))
    axes.plot([-reach, reach], [-reach, reach], color="0.3", linewidth=0.8)
    axes.set_xlabel("normal quantile")
    axes.set_ylabel("(observed - calculated) / sigma")
    return axes


def draw_correlation(axes: Axes, correlation: np.ndarray, names: Sequence[str]) -> Axes:
    """Map of the correlations of the constants, shape (p, p)."""
    image = axes.imshow(correlation, cmap="RdBu_r", vmin=-1.0, vmax=1.0, interpolation="nearest")
    if len(names) <= _NAMES_AT_MOST:
        size = 8 if len(names) <= 20 else 5
        axes.set_xticks(range(len(names)), names, rotation=90, fontsize=size)
        axes.set_yticks(range(len(names)), names, fontsize=size)
    axes.figure.colorbar(image, ax=axes, label="correlation")
    return axes


def draw_shifts(axes: Axes, names: Sequence[str], shifts: np.ndarray) -> Axes:
    """Shift of each constant between two runs, in units of the sigma of the shift; shape (p,)."""
    places = np.arange(len(names))
    axes.axhspan(-1.0, 1.0, color="0.9")
    axes.plot(places, shifts, linestyle="none", marker="o", color=_COLOURS[0])
    axes.axhline(0.0, color="0.4", linewidth=0.8)
    axes.set_xticks(places, names, rotation=90)
    axes.set_ylabel("shift / sigma of the shift")
    return axes


def draw_prediction_sigma(
    axes: Axes, curves: Mapping[str, tuple[np.ndarray, np.ndarray]], limits: Mapping[str, int]
) -> Axes:
    """Sigma of predicted levels or lines against J, a curve for each v.

    Parameters
    ----------
    axes : Axes
    curves : mapping from name to (J, sigma in cm-1)
    limits : mapping from name to the largest J observed
        The curve goes on dashed beyond it.
    """
    for number, (name, (j, sigma)) in enumerate(curves.items()):
        colour = _COLOURS[number % len(_COLOURS)]
        inside = j <= limits.get(name, -1)
        axes.plot(j[inside], sigma[inside], color=colour, label=name)
        axes.plot(j[~inside], sigma[~inside], color=colour, linestyle="--", label=None if inside.any() else name)
        places = np.linspace(0, len(j) - 1, 8).astype(int)
        marker = _MARKERS[number % len(_MARKERS)]
        axes.plot(j[places], sigma[places], linestyle="none", marker=marker, markersize=4, color=colour)
    axes.set_yscale("log")
    axes.set_xlabel("J")
    axes.set_ylabel("sigma (cm-1), dashed beyond the lines observed")
    axes.legend(fontsize=7, frameon=False)
    return axes


def draw_potential(axes: Axes, r: np.ndarray, energy: np.ndarray, points: Sequence[tuple[float, float, float]]) -> Axes:
    """Potential curve in A and cm-1, with (r_min, r_max, energy) of each vibrational level."""
    axes.plot(r, energy, color=_COLOURS[0])
    for inner, outer, level in points:
        axes.plot([inner, outer], [level, level], color=_COLOURS[1], linewidth=0.8, marker="|", markersize=5)
    axes.set_xlabel("r (A)")
    axes.set_ylabel("V (cm-1)")
    if points:
        top = max(level for _, _, level in points)
        axes.set_ylim(-0.03 * top, 1.15 * top)
        axes.set_xlim(0.93 * min(p[0] for p in points), 1.07 * max(p[1] for p in points))
    return axes


def corner_figure(draws: Mapping[str, np.ndarray], units: Mapping[str, str]) -> Figure:
    """Corner plot of draws by name, each about its mean in a power of ten of its unit, so that axes can be read.

    Parameters
    ----------
    draws : mapping from name to ndarray of float, shape (draws,)
    units : mapping from name to unit
    """
    columns, labels = [], []
    for name, values in draws.items():
        mean, spread = float(np.mean(values)), float(np.std(values))
        power = int(np.floor(np.log10(spread))) if spread > 0 else 0
        columns.append((values - mean) / 10.0**power)
        unit = "" if units.get(name, "1") == "1" else f" {units[name]}"
        sign = "+" if mean < 0 else "-"
        labels.append(f"{name} {sign} {abs(mean):.{_digits(mean, power)}g}\n(1e{power}{unit})")
    figure = Figure(figsize=(1.6 * len(columns) + 1.2, 1.6 * len(columns) + 1.2))
    FigureCanvasAgg(figure)
    # A dictionary of our own: the library adds keys to what it is given.
    corner.corner(
        np.stack(columns, axis=1),
        fig=figure,
        labels=labels,
        color=_COLOURS[0],
        bins=30,
        hist_kwargs={"linewidth": 1.0},
        label_kwargs={"fontsize": 7},
        labelpad=0.1,
        max_n_ticks=3,
        plot_datapoints=False,
    )
    for axes in figure.axes:
        axes.tick_params(labelsize=6)
    return figure


def fit_figures(fit: Fit) -> dict[str, Callable[[Axes], Axes]]:
    """What `export` draws of every fit: a name, and what draws it into an Axes."""
    used = np.flatnonzero(fit.lines.used)
    factor = fit.noise.by_group[fit.design.group_of]
    z = fit.residuals[used] / (fit.lines.sigma[used] * factor)
    m, labels, member = band_series(fit, used)
    correlation, names = correlations(fit)
    expected = normal_quantiles(len(z))
    return {
        "residuals": lambda axes: draw_residuals(axes, m, z, labels, member),
        "quantiles": lambda axes: draw_quantiles(axes, expected, np.sort(z)),
        "correlation": lambda axes: draw_correlation(axes, correlation, names),
    }


def band_series(fit: Fit, used: np.ndarray) -> tuple[np.ndarray, tuple[str, ...], np.ndarray]:
    """m of the used lines, names of their bands, and the band of each."""
    lines = fit.lines
    up = lines.j_upper[used] > lines.j_lower[used]
    m = np.where(up, lines.j_lower[used] + 1, -lines.j_lower[used])
    keys = np.stack([lines.isotopologue[used], lines.v_upper[used], lines.v_lower[used]])
    bands, member = np.unique(keys, axis=1, return_inverse=True)
    labels = tuple(f"{lines.isotopologues[code]} {upper}-{lower}" for code, upper, lower in bands.T)
    return m, labels, member.ravel()


def correlations(fit: Fit) -> tuple[np.ndarray, tuple[str, ...]]:
    """Correlation matrix of the constants that are not fixed, and their names."""
    free = np.flatnonzero(fit.sigmas[: len(fit.constants)] > 0)
    scale = fit.sigmas[free]
    matrix = fit.covariance[np.ix_(free, free)] / np.outer(scale, scale)
    return matrix, tuple(fit.constants[i].name for i in free)


def normal_quantiles(count: int) -> np.ndarray:
    """Quantiles of the normal distribution at (i - 1/2)/count, the usual plotting positions."""
    return ndtri((np.arange(count) + 0.5) / count)


def _digits(mean: float, power: int) -> int:
    """Significant digits that show `mean` down to one tenth of 10^power."""
    if mean == 0:
        return 1
    return max(int(np.floor(np.log10(abs(mean)))) - power + 2, 1)
