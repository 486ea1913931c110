"""Reading a schedule's table from a CSV file, with errors that name the line."""

from __future__ import annotations

import csv
import os
from dataclasses import dataclass
from pathlib import Path

from anneal_ref.base.checks import choice, number
from anneal_ref.base.errors import InputError, in_words

COLUMNS = ("s", "transverse", "problem")


@dataclass(frozen=True, slots=True)
class ScheduleTable:
    """What a file and its reader say: columns s, transverse, problem; unit; prefactor."""

    columns: tuple[list[float], list[float], list[float]]
    unit: str
    prefactor: float


def read_table(path: str | os.PathLike[str], unit: str | None, prefactor: float | None) -> ScheduleTable:
    """Read the file; see `Schedule.read_csv` for its form.

    Raises
    ------
    InputError
        Names the file and the line.
    """
    name = os.fspath(path)
    try:
        lines = Path(path).read_text(encoding="utf-8-sig").splitlines()
    except FileNotFoundError as error:
        raise InputError(f"there is no schedule file {name}") from error
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"the schedule file {name} cannot be read: {in_words(error)}") from error
    said: dict[str, str] = {}
    header: list[str] | None = None
    rows: list[list[float]] = []
    for count, line in enumerate(lines, start=1):
        where = f"{name}, line {count}"
        text = line.strip()
        if text.startswith("#"):
            key, colon, value = text.lstrip("# ").partition(":")
            if colon and key.strip() in ("unit", "prefactor"):
                _note(said, key.strip(), value.strip(), bool(rows), where)
        elif text:
            cells = [cell.strip() for cell in next(csv.reader([text]))]
            if header is None:
                header = _header(cells, where)
            else:
                rows.append(_row(cells, header, where))
                _check_row(rows, header, where)
    if header is None or not rows:
        raise InputError(
            f"{name}: the file holds no table; it needs a line with the names s,transverse,problem and rows of numbers"
        )
    s, transverse, problem = ([row[header.index(column)] for row in rows] for column in COLUMNS)
    return ScheduleTable((s, transverse, problem), *_units(said, unit, prefactor, name))


def _note(said: dict[str, str], key: str, value: str, late: bool, where: str) -> None:
    if late or key in said:
        raise InputError(f"{where}: `{key}` must be given once, before the first row of numbers")
    said[key] = value


def _header(cells: list[str], where: str) -> list[str]:
    if sorted(cells) != sorted(COLUMNS):
        raise InputError(
            f"{where}: the first line must name the columns s, transverse and problem, separated by commas, and no "
            f"others; got {', '.join(map(repr, cells))}"
        )
    return cells


def _row(cells: list[str], header: list[str], where: str) -> list[float]:
    if len(cells) != len(header):
        raise InputError(f"{where}: a row must have {len(header)} numbers; got {len(cells)}")
    values = []
    for column, cell in zip(header, cells, strict=True):
        try:
            values.append(number(column, float(cell)))
        except ValueError as error:
            raise InputError(f"{where}: {column} must be a finite number; got {cell!r}") from error
    return values


def _check_row(rows: list[list[float]], header: list[str], where: str) -> None:
    """Say here, where the line is known, what `Schedule.from_table` would refuse."""
    s, transverse = header.index("s"), header.index("transverse")
    if len(rows) > 1 and rows[-1][s] <= rows[-2][s]:
        raise InputError(f"{where}: s must ascend strictly; got {rows[-1][s]} after {rows[-2][s]}")
    if rows[-1][transverse] < 0:
        raise InputError(f"{where}: transverse must not be negative; got {rows[-1][transverse]}")


def _units(said: dict[str, str], unit: str | None, prefactor: float | None, name: str) -> tuple[str, float]:
    """Bring together what the file says and what the caller says; they must not contradict each other."""
    try:
        file_unit = choice("unit", said["unit"], ("rad/ns", "GHz", "1")) if "unit" in said else None
        file_prefactor = float(said["prefactor"]) if "prefactor" in said else None
    except InputError as error:
        raise InputError(f"{name}: {error}") from error
    except ValueError as error:
        raise InputError(f"{name}: prefactor must be a positive number; got {said['prefactor']!r}") from error
    for key, in_file, given in (("unit", file_unit, unit), ("prefactor", file_prefactor, prefactor)):
        if in_file is not None and given is not None and in_file != given:
            raise InputError(f"{name}: the file says {key} {in_file}, the caller {given}; take one of them away")
    return unit or file_unit or "rad/ns", next(x for x in (prefactor, file_prefactor, 1.0) if x is not None)
