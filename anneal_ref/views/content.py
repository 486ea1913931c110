"""The pieces of a page: tables, pictures, sections."""

from __future__ import annotations

import base64
import io
import re
from dataclasses import dataclass

import matplotlib
from matplotlib.axes import Axes

from anneal_ref.views.style import figure_of

_MINUS = re.compile(r"(?<![\w.])-(?=\d)")


@dataclass(frozen=True, slots=True)
class Picture:
    """A plot as a data URI, with a caption and a text for those who cannot see it."""

    source: str
    alt: str
    caption: str


@dataclass(frozen=True, slots=True)
class Row:
    """Cells of a table, with true minus signs; a pooled row stands out."""

    cells: tuple[str, ...]
    pooled: bool = False

    def __post_init__(self) -> None:
        """Set the minus signs."""
        object.__setattr__(self, "cells", tuple(_MINUS.sub("\N{MINUS SIGN}", cell) for cell in self.cells))


@dataclass(frozen=True, slots=True)
class Grid:
    """A table: headings, the columns among them that hold words, rows."""

    heads: tuple[str, ...]
    rows: tuple[Row, ...]
    notes: tuple[str, ...] = ()
    title: str = ""


@dataclass(frozen=True, slots=True)
class Section:
    """A part of the page, in the order title, text, tables, pictures, points."""

    title: str
    texts: tuple[str, ...] = ()
    tables: tuple[Grid, ...] = ()
    pictures: tuple[Picture, ...] = ()
    points: tuple[str, ...] = ()


def picture(axes: Axes, alt: str, caption: str) -> Picture:
    """Turn a plot into vector graphics that is part of the page."""
    figure = figure_of(axes)
    buffer = io.BytesIO()
    with matplotlib.rc_context({"svg.hashsalt": "anneal_ref", "svg.fonttype": "path"}):
        figure.savefig(buffer, format="svg", metadata={"Date": None}, transparent=True)
    return Picture(f"data:image/svg+xml;base64,{base64.b64encode(buffer.getvalue()).decode()}", alt, caption)
