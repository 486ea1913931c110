"""A lattice drawn from its coordinates, coloured by deviation."""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.colors import Normalize
from matplotlib.patches import FancyArrowPatch
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite
from anneal_ref.model.lattice import Lattice
from anneal_ref.views.style import DEVIATIONS, EDGE, INK, figure_of, new_axes


def deviations(
    lattice: Lattice, bonds: ArrayLike, sites: ArrayLike | None = None, ax: Axes | None = None,
    limit: float | None = None,
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
    ax.set(
        xlim=(where[:, 0].min() - pad, where[:, 0].max() + pad), ylim=(where[:, 1].min() - pad, where[:, 1].max() + pad)
    )
    ax.set_axis_off()
    side: dict[str, Any] = (
        {"location": "bottom", "aspect": 35, "shrink": 0.8} if extent[0] > 1.4 * extent[1] else {"shrink": 0.8}
    )
    figure_of(ax).colorbar(ScalarMappable(scale, DEVIATIONS), ax=ax, label=label, **side)
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
