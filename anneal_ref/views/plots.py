"""Pictures of a comparison. Every function draws on the Axes it is given, or on new ones, and returns them.

Nothing here touches pyplot or any global state, so it works on machines without a display:
`plots.correlations(...).figure.savefig("correlations.png")`. Truth is dark and drawn as lines, the processor is
coloured and drawn as points; the three colours differ in lightness too, for readers who cannot tell hues apart and
for black-and-white print.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, cast

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.colors import Colormap, LinearSegmentedColormap, Normalize
from matplotlib.figure import Figure
from matplotlib.patches import FancyArrowPatch
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite
from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.model.lattice import Lattice

INK, QUIET, EDGE, PROCESSOR, LIMIT, SHADE = "#22303a", "#7d8a91", "#aab3b7", "#0b7a75", "#b4491d", "#e4ebea"
DEVIATIONS: Colormap = LinearSegmentedColormap.from_list(
    "deviations", ["#124e78", "#5d95b5", "#e3e2dc", "#dd9a5b", "#a63c06"]
)
CROWD = 600  # points beyond which error bars turn into a density


def new_axes(width: float = 4.6, height: float = 4.0) -> Axes:
    """Return the Axes of a new figure, sizes in inches, that knows nothing of any display."""
    return Figure(figsize=(width, height), layout="constrained").add_subplot()


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
    ax = _dressed(ax or new_axes())
    pairs = [np.triu_indices(one.shape[0], 1) for one in truth]
    x, x_error = _flat(truth, pairs)
    y, y_error = _flat(processor, pairs)
    ax.plot([-1, 1], [-1, 1], color=INK, linewidth=1, zorder=1, label="perfect agreement")
    if x.size <= CROWD:
        ax.errorbar(
            x, y, xerr=x_error, yerr=y_error, fmt="o", markersize=3.2, color=PROCESSOR, ecolor=PROCESSOR + "66", elinewidth=0.8,
            markeredgewidth=0, zorder=2, label=f"{x.size} pairs, ± 1 standard error",
        )  # fmt: skip
    else:
        paints = LinearSegmentedColormap.from_list("crowd", ["#bfdedb", PROCESSOR, "#06302e"])
        mesh = ax.hexbin(x, y, gridsize=55, extent=(-1, 1, -1, 1), bins="log", mincnt=1, cmap=paints, linewidths=0, zorder=2)
        _figure(ax).colorbar(mesh, ax=ax, shrink=0.8, label=f"pairs per cell, of {x.size}")
        ax.plot([], [], "o", color=PROCESSOR, markersize=3, label=f"typical error ± {np.median(y_error):.2g}")
    low = max(-1.04, min(float(min(x.min(), y.min())) - 0.08, -0.1)) if x.size else -1.04
    high = min(1.04, max(float(max(x.max(), y.max())) + 0.08, 0.1)) if x.size else 1.04
    ax.set(xlim=(low, high), ylim=(low, high), aspect="equal")
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_locator(MaxNLocator(5))
    ax.set(xlabel=r"truth $\langle Z_i Z_j\rangle$", ylabel=r"processor $\langle Z_i Z_j\rangle$")
    ax.legend(loc="upper left", frameon=False, fontsize="small", handlelength=1.4)
    return ax


def deviations(
    lattice: Lattice, bonds: ArrayLike, sites: ArrayLike | None = None, ax: Axes | None = None, limit: float | None = None,
    label: str = "deviation (standard errors)",
) -> Axes:  # fmt: skip
    """Draw the lattice with its bonds, and its sites, coloured by their deviation from the truth in standard errors.

    Two-dimensional coordinates are drawn as they are, three-dimensional ones in parallel projection, a lattice without
    coordinates on a circle. Bonds that would run over another site, such as those that close a periodic boundary, are
    drawn as arcs.

    Parameters
    ----------
    lattice : Lattice
    bonds : array_like, shape (m,), in standard errors
        Deviation of <Z_i Z_j> in the order of `lattice.edges`.
    sites : array_like, shape (n,), in standard errors, optional
        Deviation of <Z_i>; grey sites if not given.
    ax : Axes, optional
    limit : float, optional
        Deviation at the ends of the colour scale; by default the largest one, and at least 3.
    label : str
        Of the colour scale.

    Returns
    -------
    Axes
    """
    bonds = finite("bonds", bonds, (len(lattice.edges),))
    sites = None if sites is None else finite("sites", sites, (lattice.n_sites,))
    ax = ax or new_axes(4.8, 3.8)
    where = positions(lattice)
    largest = max([3.0, *np.abs(bonds), *(np.abs(sites) if sites is not None else [])])
    scale = Normalize(-(limit or largest), limit or largest)
    starts, ends = where[lattice.edges[:, 0]], where[lattice.edges[:, 1]]
    arcs = _over_sites(where, lattice.edges)
    width = float(np.clip(120 / max(len(bonds), 1), 1.2, 4.0))
    straight = [(tuple(one), tuple(other)) for one, other in zip(starts[~arcs], ends[~arcs], strict=True)]
    # strong colours last, so that no quiet bond hides a loud one
    order = np.argsort(np.abs(bonds[~arcs]))
    paints = DEVIATIONS(scale(bonds[~arcs]))
    lines = [straight[k] for k in order]
    ax.add_collection(LineCollection(lines, colors=EDGE, linewidths=width + 1, capstyle="round", zorder=1))
    ax.add_collection(LineCollection(lines, colors=paints[order], linewidths=width, capstyle="round", zorder=2))
    centre = where.mean(axis=0)
    for one, other, value in zip(starts[arcs], ends[arcs], bonds[arcs], strict=True):
        for colour, extra in ((EDGE, 1.0), (DEVIATIONS(scale(value)), 0.0)):
            ax.add_patch(
                FancyArrowPatch(
                    tuple(one), tuple(other), arrowstyle="-", connectionstyle=f"arc3,rad={_bulge(one, other, centre)}",
                    color=colour, linewidth=0.8 * width + extra, shrinkA=0, shrinkB=0, zorder=0,
                )
            )  # fmt: skip
    faces = "#cdd4d6" if sites is None else DEVIATIONS(scale(sites))
    size = float(np.clip(3200 / max(lattice.n_sites, 1), 25, 210))
    ax.scatter(where[:, 0], where[:, 1], s=size, c=faces, edgecolors=INK, linewidths=0.9, zorder=3)
    if lattice.n_sites <= 40:
        for site, (x, y), shade in zip(lattice.labels, where, _shades(sites, scale, lattice.n_sites), strict=True):
            ax.text(x, y, str(site), ha="center", va="center", fontsize=6.5, color=shade, zorder=4)
    ax.set_aspect("equal")
    extent = np.ptp(where, axis=0)
    pad = 0.12 * max(float(extent.max()), 1.0) * (2.2 if arcs.any() else 1.0)
    ax.set(xlim=(where[:, 0].min() - pad, where[:, 0].max() + pad), ylim=(where[:, 1].min() - pad, where[:, 1].max() + pad))
    ax.set_axis_off()
    side: dict[str, Any] = {"location": "bottom", "aspect": 35, "shrink": 0.8} if extent[0] > 1.4 * extent[1] else {"shrink": 0.8}
    _figure(ax).colorbar(ScalarMappable(scale, DEVIATIONS), ax=ax, label=label, **side)
    return ax


def against_duration(
    durations: ArrayLike, truth: Sequence[Estimate], processor: Sequence[Estimate], quantity: str, ax: Axes | None = None,
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
    ax = _dressed(ax or new_axes(4.6, 3.4))
    names = np.array(instances if instances is not None else [""] * len(truth))
    kinds = list(dict.fromkeys(names.tolist()))
    markers = "osD^vP"
    if len(kinds) > len(markers):
        times, truth, processor = _averaged(times, truth, processor)
        names, kinds = np.array([f"mean of {len(kinds)} instances"] * len(times)), [f"mean of {len(kinds)} instances"]
    for k, kind in enumerate(kinds):
        rows = np.flatnonzero(names == kind)
        rows = rows[np.argsort(times[rows])]
        exact = np.array([float(truth[r]) for r in rows])
        band = np.nan_to_num(np.array([float(truth[r].half_width(level)) for r in rows]))
        measured = np.array([float(processor[r]) for r in rows])
        bars = np.array([float(np.nan_to_num(processor[r].half_width(level), nan=float(processor[r].stat))) for r in rows])
        dashes = ["-", "--", ":", "-.", (0, (5, 1)), (0, (1, 1))][k % 6]
        ax.fill_between(times[rows], exact - band, exact + band, color=SHADE, linewidth=0, zorder=1)
        ax.plot(times[rows], exact, color=INK, linewidth=1.3, linestyle=dashes, zorder=2, label=f"truth {kind}".strip())
        ax.errorbar(
            times[rows], measured, yerr=bars, fmt=markers[k % 6], color=PROCESSOR, markersize=5, capsize=2.5, elinewidth=1.1,
            markeredgecolor="white", markeredgewidth=0.5, zorder=3, label=f"processor {kind}".strip(),
        )  # fmt: skip
    if len(times) and times.max() > 8 * times.min():
        ax.set_xscale("log")
    ax.margins(x=0.12, y=0.12)
    ax.set(xlabel=f"duration ({unit})" if unit else "duration", ylabel=quantity)
    ax.legend(frameon=False, fontsize="x-small", ncols=max(1, min(len(kinds), 3)), loc="lower left", bbox_to_anchor=(0.0, 1.0))
    return ax


def correlation_errors(
    labels: Sequence[str], scores: Sequence[Score], limit: float | None = None, ax: Axes | None = None
) -> Axes:
    """Draw correlation errors with their intervals, a row each, beside the floor of a perfect processor and the limit.

    Parameters
    ----------
    labels : sequence of r str
    scores : sequence of r Score
    limit : float, optional
        The acceptance limit.
    ax : Axes, optional

    Returns
    -------
    Axes
    """
    ax = _dressed(ax or new_axes(6.2, 1.2 + 0.32 * len(scores)))
    rows = np.arange(len(scores))[::-1]
    for row, score in zip(rows, scores, strict=True):
        colour = PROCESSOR if limit is None or score.high <= limit else LIMIT if score.low > limit else QUIET
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


def positions(lattice: Lattice) -> NDArray[np.float64]:
    """Return drawing positions, shape (n, 2): the coordinates, projected if they have three dimensions, or a circle."""
    given = lattice.coordinates
    if given is None:
        angles = 2 * np.pi * np.arange(lattice.n_sites) / max(lattice.n_sites, 1)
        return np.column_stack([np.cos(angles), np.sin(angles)])
    places = np.asarray(given, float)
    if places.shape[1] == 1:
        return np.column_stack([places[:, 0], np.zeros(len(places))])
    if places.shape[1] == 2:
        return places
    # oblique parallel projection: no two sites of a small cubic box coincide
    return np.column_stack([places[:, 0] + 0.43 * places[:, 1], places[:, 2] + 0.27 * places[:, 1]])


def _over_sites(where: NDArray[np.float64], edges: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Tell which bonds, drawn straight, would run over a third site."""
    starts, along = where[edges[:, 0]], where[edges[:, 1]] - where[edges[:, 0]]
    squares = np.maximum((along**2).sum(axis=1), 1e-300)
    away = where[None, :, :] - starts[:, None, :]
    fraction = np.einsum("mnd,md->mn", away, along) / squares[:, None]
    gap = np.linalg.norm(away - fraction[:, :, None] * along[:, None, :], axis=2)
    between = (fraction > 1e-6) & (fraction < 1 - 1e-6) & (gap < 0.05 * np.sqrt(squares.min(initial=np.inf)))
    return np.asarray(between.any(axis=1))


def _bulge(one: NDArray[np.float64], other: NDArray[np.float64], centre: NDArray[np.float64]) -> float:
    """Curvature of an arc that bends away from the middle of the lattice."""
    along, out = other - one, (one + other) / 2 - centre
    side = along[0] * out[1] - along[1] * out[0]
    return -0.22 if side >= 0 else 0.22


def _shades(sites: NDArray[np.float64] | None, scale: Normalize, n_sites: int) -> list[str]:
    if sites is None:
        return [INK] * n_sites
    paints = np.asarray(DEVIATIONS(scale(sites)))[:, :3]
    return ["white" if paint @ [0.299, 0.587, 0.114] < 0.5 else INK for paint in paints]


def _flat(
    matrices: Sequence[Estimate], pairs: Sequence[tuple[NDArray[np.intp], NDArray[np.intp]]]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    if not matrices:
        return np.zeros(0), np.zeros(0)
    values = np.concatenate([one.value[pair] for one, pair in zip(matrices, pairs, strict=True)])
    errors = np.concatenate([one.stat[pair] + np.nan_to_num(one.num[pair]) for one, pair in zip(matrices, pairs, strict=True)])
    return values, errors


def _averaged(
    times: NDArray[np.float64], truth: Sequence[Estimate], processor: Sequence[Estimate]
) -> tuple[NDArray[np.float64], list[Estimate], list[Estimate]]:
    """Average over the instances at each duration; independent shot errors, common numerical ones."""
    moments = np.unique(times)
    means = []
    for many in (truth, processor):
        rows = [[many[k] for k in np.flatnonzero(times == moment)] for moment in moments]
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


def _dressed(ax: Axes) -> Axes:
    ax.spines[["top", "right"]].set_visible(False)
    ax.spines[["left", "bottom"]].set_color(QUIET)
    ax.tick_params(color=QUIET, labelcolor=INK, labelsize="small")
    ax.grid(color="#e6eaec", linewidth=0.7)
    ax.set_axisbelow(True)
    return ax


def _figure(ax: Axes) -> Figure:
    return cast(Figure, ax.get_figure(root=True))
