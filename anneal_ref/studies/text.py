"""Plain-text tables."""

from __future__ import annotations

from collections.abc import Sequence


def aligned(rows: Sequence[Sequence[str]], left: Sequence[int] = (0,), indent: str = "") -> str:
    """Return rows of cells as lines of text, numbers under each other.

    Parameters
    ----------
    rows : sequence of equally long sequences of str
        The first row is the heading.
    left : sequence of int
        Columns that are aligned at their left end; the others at their right end.
    indent : str
        What every line begins with.

    Examples
    --------
    >>> print(aligned([("name", "N"), ("ladder", "16"), ("ring", "8")]))
    name     N
    ladder  16
    ring     8
    """
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = []
    for row in rows:
        cells = [
            cell.ljust(width) if k in left else cell.rjust(width)
            for k, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append((indent + "  ".join(cells)).rstrip())
    return "\n".join(lines)


def counted(count: int, noun: str) -> str:
    """Return a number with its noun, in the plural where there is not exactly one.

    Examples
    --------
    >>> counted(1, "case"), counted(2, "case")
    ('1 case', '2 cases')
    """
    return f"{count} {noun}{'' if count == 1 else 's'}"
