"""Pictures of a comparison. Every function draws on the Axes it is given, or on new ones, and returns them.

Nothing here touches pyplot or any global state, so it works on machines without a display:
`plots.correlations(...).figure.savefig("correlations.png")`. Truth is dark and drawn as lines, the processor is
coloured and drawn as points; the three colours differ in lightness too, for readers who cannot tell hues apart and
for black-and-white print.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.judgement.equivalence import outcome_of
from anneal_ref.views.convergence_plots import (
    bond_dimension_growth,
    convergence_errors,
    convergence_figure,
    matching_bond_dimensions,
)
from anneal_ref.views.lattice_plot import deviations
from anneal_ref.views.style import INK, LIMIT, PROCESSOR, QUIET, SHADE, dressed, figure_of, new_axes

__all__ = [
    "against_duration", "bond_dimension_growth", "convergence_errors", "convergence_figure", "correlation_errors",
    "correlations", "deviations", "matching_bond_dimensions", "new_axes",
]  # fmt: skip

CROWD = 600
"""Points beyond which error bars turn into a density."""


def correlations(truth: Sequence[Estimate], processor: Sequence[Estimate], ax: Axes | None = None) -> Axes:
    """Draw the processor's pair correlations against the truth, with error bars and the line of perfect agreement.

    Parameters
    ----------
    truth, processor : sequence of Estimate, each shape (n, n)
        One matrix of <Z_i Z_j> per case; the pairs i < j are drawn. Beyond 600 pairs the points become a density.
    ax : Axes, optional

    Returns
    -------
    Axes
    """
    ax = dressed(ax or new_axes())
    pairs = [np.triu_indices(one.shape[0], 1) for one in truth]
    x, x_error = _flat(truth, pairs)
    y, y_error = _flat(processor, pairs)
    ax.plot([-1, 1], [-1, 1], color=INK, linewidth=1, zorder=1, label="perfect agreement")
    if x.size <= CROWD:
        ax.errorbar(
            x, y, xerr=x_error, yerr=y_error, fmt="o", markersize=3.2, color=PROCESSOR, ecolor=PROCESSOR + "66",
            elinewidth=0.8,
            markeredgewidth=0, zorder=2, label=f"{x.size} pairs, ± 1 standard error",
        )  # fmt: skip
    else:
        paints = LinearSegmentedColormap.from_list("crowd", ["#bfdedb", PROCESSOR, "#06302e"])
        mesh = ax.hexbin(
            x, y, gridsize=55, extent=(-1, 1, -1, 1), bins="log", mincnt=1, cmap=paints, linewidths=0, zorder=2
        )
        figure_of(ax).colorbar(mesh, ax=ax, shrink=0.8, label=f"pairs per cell, of {x.size}")
        ax.plot([], [], "o", color=PROCESSOR, markersize=3, label=f"typical error ± {np.median(y_error):.2g}")
    low = max(-1.04, min(float(min(x.min(), y.min())) - 0.08, -0.1)) if x.size else -1.04
    high = min(1.04, max(float(max(x.max(), y.max())) + 0.08, 0.1)) if x.size else 1.04
    ax.set(xlim=(low, high), ylim=(low, high), aspect="equal")
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_locator(MaxNLocator(5))
    ax.set(xlabel=r"truth $\langle Z_i Z_j\rangle$", ylabel=r"processor $\langle Z_i Z_j\rangle$")
    ax.legend(loc="upper left", frameon=False, fontsize="small", handlelength=1.4)
    return ax


def against_duration(
    durations: ArrayLike, truth: Sequence[Estimate], processor: Sequence[Estimate], quantity: str,
    ax: Axes | None = None,
    unit: str = "ns", level: float = 0.95, instances: Sequence[str] | None = None,
) -> Axes:  # fmt: skip
    """Draw a quantity against the duration: truth as a line with its error, the processor as points with theirs.

    Parameters
    ----------
    durations : array_like, shape (r,), in `unit`
    truth, processor : sequence of r scalar Estimates
    quantity : str
        Label of the vertical axis, with its unit.
    ax : Axes, optional
    unit : str
        Unit of the duration.
    level : float
        Level of the error bars.
    instances : sequence of r str, optional
        The instance of each entry: one line each, and the mean over them if there are more than six.

    Returns
    -------
    Axes
    """
    times = finite("durations", durations, (len(truth),))
    if len(processor) != len(truth):
        raise InputError(f"processor must have as many entries as truth, {len(truth)}; got {len(processor)}")
    ax = dressed(ax or new_axes(4.6, 3.4))
    names = np.array(instances if instances is not None else [""] * len(truth))
    kinds = list(dict.fromkeys(names.tolist()))
    markers = "osD^vP"
    if len(kinds) > len(markers):
        times, truth, processor = _averaged(times, truth, processor)
        names, kinds = np.array([f"mean of {len(kinds)} instances"] * len(times)), [f"mean of {len(kinds)} instances"]
    for k, kind in enumerate(kinds):
        unsorted = np.flatnonzero(names == kind)
        rows = unsorted[np.argsort(times[unsorted])].tolist()
        exact = np.array([float(truth[r]) for r in rows])
        band = np.nan_to_num(np.array([float(truth[r].half_width(level)) for r in rows]))
        measured = np.array([float(processor[r]) for r in rows])
        bars = np.array(
            [float(np.nan_to_num(processor[r].half_width(level), nan=float(processor[r].stat))) for r in rows]
        )
        dashes = ["-", "--", ":", "-.", (0, (5, 1)), (0, (1, 1))][k % 6]
        ax.fill_between(times[rows], exact - band, exact + band, color=SHADE, linewidth=0, zorder=1)
        ax.plot(times[rows], exact, color=INK, linewidth=1.3, linestyle=dashes, zorder=2, label=f"truth {kind}".strip())
        ax.errorbar(
            times[rows], measured, yerr=bars, fmt=markers[k % 6], color=PROCESSOR, markersize=5, capsize=2.5,
            elinewidth=1.1,
            markeredgecolor="white", markeredgewidth=0.5, zorder=3, label=f"processor {kind}".strip(),
        )  # fmt: skip
    if len(times) and times.max() > 8 * times.min():
        ax.set_xscale("log")
    ax.margins(x=0.12, y=0.12)
    ax.set(xlabel=f"duration ({unit})" if unit else "duration", ylabel=quantity)
    ax.legend(
        frameon=False, fontsize="x-small", ncols=max(1, min(len(kinds), 3)), loc="lower left", bbox_to_anchor=(0.0, 1.0)
    )
    return ax


def correlation_errors(
    labels: Sequence[str], scores: Sequence[Score], limit: float | None = None, ax: Axes | None = None,
    outcomes: Sequence[str] | None = None,
) -> Axes:  # fmt: skip
    """Draw correlation errors with their intervals, a row each, beside the floor of a perfect processor and the limit.

    Parameters
    ----------
    labels : sequence of r str
    scores : sequence of r Score
    limit : float, optional
        The acceptance limit.
    ax : Axes, optional
    outcomes : sequence of r str, optional
        "accept", "reject" or "inconclusive" for each row, which sets its colour; by default where the
        interval lies with regard to the limit.

    Returns
    -------
    Axes
    """
    ax = dressed(ax or new_axes(6.2, 1.2 + 0.32 * len(scores)))
    rows = np.arange(len(scores))[::-1]
    paints = {"accept": PROCESSOR, "reject": LIMIT, "inconclusive": QUIET}
    if outcomes is None:
        outcomes = ["accept" if limit is None else outcome_of(score.low, score.high, limit) for score in scores]
    for row, score, outcome in zip(rows, scores, outcomes, strict=True):
        colour = paints[outcome]
        ax.plot([score.low, score.high], [row, row], color=colour, linewidth=2.4, solid_capstyle="butt", zorder=2)
        ax.plot(score.value, row, "o", color=colour, markersize=6, markeredgecolor="white", zorder=3)
        if score.floor is not None:
            ax.plot(float(score.floor), row, "|", color=INK, markersize=10, markeredgewidth=1.4, zorder=2)
    ax.plot([], [], "|", color=INK, markersize=9, label="perfect processor, same shots")
    ax.plot([], [], "o-", color=INK, markersize=5, linewidth=2, label="processor, with interval")
    if limit is not None:
        ax.axvline(limit, color=LIMIT, linewidth=1.2, linestyle="--", zorder=1, label=f"limit {limit:g}")
    ax.set_yticks(rows, list(labels))
    ax.set_ylim(-0.7, len(scores) - 0.3)
    least = min((min(score.low, score.value) for score in scores), default=0.0)
    ax.set_xlim(left=1.15 * least if least < 0 else 0.0)
    ax.set_xlabel("correlation error (relative)")
    ax.legend(frameon=False, fontsize="x-small", ncols=3, loc="lower center", bbox_to_anchor=(0.5, 1.0))
    return ax


def _flat(
    matrices: Sequence[Estimate], pairs: Sequence[tuple[NDArray[np.intp], NDArray[np.intp]]]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    if not matrices:
        return np.zeros(0), np.zeros(0)
    values = np.concatenate([one.value[pair] for one, pair in zip(matrices, pairs, strict=True)])
    errors = np.concatenate(
        [one.stat[pair] + np.nan_to_num(one.num[pair]) for one, pair in zip(matrices, pairs, strict=True)]
    )
    return values, errors


def _averaged(
    times: NDArray[np.float64], truth: Sequence[Estimate], processor: Sequence[Estimate]
) -> tuple[NDArray[np.float64], list[Estimate], list[Estimate]]:
    """Average over the instances at each duration; independent shot errors, common numerical ones."""
    moments = np.unique(times)
    means = []
    for many in (truth, processor):
        rows = [[many[k] for k in np.flatnonzero(times == moment).tolist()] for moment in moments]
        means.append(
            [
                Estimate(
                    np.mean([one.value for one in row]),
                    np.sqrt(np.sum([one.stat**2 for one in row])) / len(row),
                    np.mean([one.num for one in row]),
                    "mean over instances",
                )
                for row in rows
            ]
        )
    return moments, means[0], means[1]
