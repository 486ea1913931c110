"""Pictures of convergence studies, in the manner of `plots`: errors of runs, matching bond dimensions, their growth."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, LogLocator, NullFormatter, NullLocator

from anneal_ref.base.checks import choice
from anneal_ref.judgement.growth import Growth
from anneal_ref.judgement.matching import MATCHED, Matching
from anneal_ref.views.style import INK, LIMIT, PROCESSOR, QUIET, SHADE, dressed, new_axes

if TYPE_CHECKING:
    from anneal_ref.truth.convergence import Convergence

_ABSCISSAE = {
    "bond_dimension": "bond dimension",
    "discarded_weight": "discarded weight",
    "seconds": "wall time of a run (s)",
}
_ORDINATES = {
    "correlation_error": "correlation error (relative)",
    "largest": "largest error of a correlation",
    "energy": "error of the energy per spin (J)",
    "q2": "error of q2",
}
_MARKERS = "osD^v"


def convergence_errors(
    convergence: Convergence,
    against: Literal["bond_dimension", "discarded_weight", "seconds"] = "bond_dimension",
    quantity: Literal["correlation_error", "largest", "energy", "q2"] = "correlation_error",
    ax: Axes | None = None,
) -> Axes:
    """Draw the errors of the runs of a convergence study against what they cost, a line for each step.

    Full symbols are errors that are known; open ones are less than twice as large as the error of what they are held
    against, which is shaded. A run that is its own target is left out, and so is one that discards nothing where
    that is the horizontal axis.

    Parameters
    ----------
    convergence : Convergence
    against : {"bond_dimension", "discarded_weight", "seconds"}
    quantity : {"correlation_error", "largest", "energy", "q2"}
    ax : Axes, optional

    Returns
    -------
    Axes
    """
    choice("against", against, _ABSCISSAE)
    choice("quantity", quantity, _ORDINATES)
    ax = dressed(ax or new_axes(4.4, 3.4))
    errors, resolved = convergence.error(quantity), convergence.resolved("correlation_error")
    x = np.array([float(getattr(rung, against)) for rung in convergence.rungs])
    drawn = (errors > 0) & (x > 0)
    for k, halvings in enumerate(convergence.halvings):
        rows = drawn & np.array([rung.halvings == halvings for rung in convergence.rungs])
        finest = halvings == convergence.halvings[-1]
        colour, marker = INK if finest else QUIET, _MARKERS[k % len(_MARKERS)]
        label = "step as given" if halvings == 0 else f"1/{2**halvings} of the step"
        ax.plot(x[rows], errors[rows], "-" if finest else "--", color=colour, linewidth=1.1, zorder=2)
        for known, fill in ((True, colour), (False, "white")):
            some = rows & (resolved == known)
            ax.plot(x[some], errors[some], marker, color=colour, markerfacecolor=fill, markersize=5, zorder=3)
        ax.plot([], [], marker + ("-" if finest else "--"), color=colour, markersize=5, linewidth=1.1, label=label)
    ax.set(xscale="log", yscale="log", xlabel=_ABSCISSAE[against], ylabel=_ORDINATES[quantity])
    floor = convergence.floor(quantity) if quantity in ("correlation_error", "largest") else math.nan
    least = float(errors[drawn].min(initial=np.inf))
    # far below all runs it would only squeeze them together
    if floor > 0.05 * least:
        what = "last run" if convergence.reference is None else "reference"
        low = 0.4 * min(floor, least)
        ax.axhspan(low, floor, color=SHADE, zorder=0, label=f"error of the {what} itself")
        ax.set_ylim(bottom=low)
    if against == "bond_dimension":
        _whole_sizes(ax, convergence.bond_dimensions)
    elif against == "discarded_weight":
        ax.invert_xaxis()
    else:
        _plain(ax.xaxis)
    ax.legend(frameon=False, fontsize="x-small", loc="best")
    return ax


def convergence_figure(convergence: Convergence, title: str = "") -> Figure:
    """Return a figure of the correlation errors against bond dimension, discarded weight and wall time."""
    figure = Figure(figsize=(11.0, 3.5), layout="constrained")
    axes = figure.subplots(1, 3, sharey=True)
    for ax, against in zip(axes, _ABSCISSAE, strict=True):
        convergence_errors(convergence, against, ax=ax)  # type: ignore[arg-type]
    for ax in axes[1:]:
        ax.set_ylabel("")
        ax.get_legend().remove()
    if title:
        figure.suptitle(title, fontsize="medium", color=INK)
    return figure


def matching_bond_dimensions(matching: Matching, ax: Axes | None = None) -> Axes:
    """Draw the pooled errors of the ladder, the processor's with its interval, and where they meet.

    Parameters
    ----------
    matching : Matching
    ax : Axes, optional

    Returns
    -------
    Axes
    """
    ax = dressed(ax or new_axes(4.6, 3.6))
    sizes, errors = matching.bond_dimensions, matching.errors
    # an interval that reaches 0 ends at the lower edge
    low = max(matching.error_low, 0.4 * min(float(errors.min()), max(matching.error, 0.0) or math.inf))
    level = f"{matching.level:.0%}"
    ax.axhspan(low, matching.error_high, color=PROCESSOR, alpha=0.15, linewidth=0, zorder=0)
    if matching.error > 0:
        ax.axhline(matching.error, color=PROCESSOR, linewidth=1.3, zorder=1)
    ax.plot([], [], color=PROCESSOR, linewidth=4, alpha=0.5, label=f"processor, {level} interval")
    ax.plot(sizes, errors, "o-", color=INK, markersize=5, linewidth=1.1, zorder=2, label="matrix product states")
    if matching.outcome == MATCHED:
        ends = np.clip([matching.low, matching.high], sizes[0], sizes[-1])
        ax.plot(ends, [matching.error] * 2, color=LIMIT, linewidth=2.6, solid_capstyle="butt", zorder=3)
        ax.plot(
            matching.bond_dimension, matching.error, "D", color=LIMIT, markersize=7, markeredgecolor="white", zorder=4,
            label=f"matching bond dimension {matching.bond_dimension:.3g}",
        )  # fmt: skip
    ax.set(xscale="log", yscale="log", xlabel="bond dimension", ylabel="correlation error (relative)")
    _whole_sizes(ax, sizes)
    ax.legend(frameon=False, fontsize="x-small", loc="best")
    return ax


def bond_dimension_growth(growth: Growth, up_to: float | None = None, ax: Axes | None = None) -> Axes:
    """Draw matching bond dimensions against size with the two laws and the bands in which a new size would lie.

    Parameters
    ----------
    growth : Growth
    up_to : float, optional
        The largest size drawn; by default a quarter beyond the data.
    ax : Axes, optional

    Returns
    -------
    Axes
    """
    ax = dressed(ax or new_axes(4.6, 3.6))
    first, last = float(growth.sizes.min()), float(growth.sizes.max())
    x = np.linspace(first, 1.25 * last if up_to is None else up_to, 120)
    for law, colour, dashes in ((growth.exponential, LIMIT, "-"), (growth.power, INK, "--")):
        middle, low, high = np.array([law.at(one) for one in x]).T
        better = growth.verdict == ("exponential" if law is growth.exponential else "power")
        ax.plot(x, middle, dashes, color=colour, linewidth=1.2, zorder=2, label=str(law) + (" *" if better else ""))
        ax.fill_between(x, low, high, color=colour, alpha=0.12, linewidth=0, zorder=1)
    values = growth.bond_dimensions
    ends = np.array([(one.low, one.high) for one in growth.matchings])
    # an interval that leaves its ladder is drawn to the ladder's end
    edges = np.array([(one.bond_dimensions[0], one.bond_dimensions[-1]) for one in growth.matchings])
    ends = np.clip(ends, edges[:, :1], edges[:, 1:])
    ax.errorbar(
        growth.sizes, values, yerr=np.maximum([values - ends[:, 0], ends[:, 1] - values], 0.0), fmt="o",
        color=PROCESSOR, markersize=5, capsize=2.5, elinewidth=1.1, markeredgecolor="white", zorder=3,
        label="matching bond dimension",
    )  # fmt: skip
    note = "the data cannot tell the two apart" if growth.verdict == "cannot tell" else f"* {growth.verdict} law"
    ax.set_title(note, fontsize="small", color=INK, loc="left")
    ax.set(yscale="log", xlabel="size", ylabel="bond dimension")
    _plain(ax.yaxis)
    ax.legend(frameon=False, fontsize="x-small", loc="upper left")
    return ax


def _whole_sizes(ax: Axes, sizes: tuple[int, ...]) -> None:
    """Label a logarithmic axis of bond dimensions with those that were run."""
    _plain(ax.xaxis)
    ax.xaxis.set_major_locator(FixedLocator(sizes))


def _plain(axis: Axis) -> None:
    """Label a logarithmic axis that may span less than a decade with plain numbers."""
    axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_locator(NullLocator())
    axis.set_minor_formatter(NullFormatter())
