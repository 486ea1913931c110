"""The look of all plots: colours, and Axes that need no display."""

from __future__ import annotations

from typing import cast

from matplotlib.axes import Axes
from matplotlib.colors import Colormap, LinearSegmentedColormap
from matplotlib.figure import Figure

INK, QUIET, EDGE, PROCESSOR, LIMIT, SHADE = "#22303a", "#7d8a91", "#aab3b7", "#0b7a75", "#b4491d", "#e4ebea"
DEVIATIONS: Colormap = LinearSegmentedColormap.from_list(
    "deviations", ["#124e78", "#5d95b5", "#e3e2dc", "#dd9a5b", "#a63c06"]
)


def new_axes(width: float = 4.6, height: float = 4.0) -> Axes:
    """Return the Axes of a new figure, sizes in inches, that knows nothing of any display."""
    return Figure(figsize=(width, height), layout="constrained").add_subplot()


def dressed(ax: Axes) -> Axes:
    """Return the Axes with quiet spines and a faint grid."""
    ax.spines[["top", "right"]].set_visible(False)
    ax.spines[["left", "bottom"]].set_color(QUIET)
    ax.tick_params(color=QUIET, labelcolor=INK, labelsize="small")
    ax.grid(color="#e6eaec", linewidth=0.7)
    ax.set_axisbelow(True)
    return ax


def figure_of(ax: Axes) -> Figure:
    """Return the figure that the Axes belong to."""
    return cast(Figure, ax.get_figure(root=True))
