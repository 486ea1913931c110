"""Sample files as text: a shot a line.

Values stand between commas, semicolons or white space. Lines that begin with # are comments; before the data,
`# key: value` gives an entry of the manifest, and `# values: bits` or `# values: spins` says what the numbers are. One
line of names may come before the data: for each site a word with its device label (`s12`, `site 12`), or `spin`
throughout where there are no labels; `count` for how often a line was seen; `group` for the gauge, batch or run of
the shot.
"""

from __future__ import annotations

import difflib
import json
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO, Any, NoReturn

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError
from anneal_ref.observe.manifest import FORMAT, KEYS, VERSION, Manifest, check_format
from anneal_ref.observe.table import Table

_ENTRY = re.compile(r"#+\s*([A-Za-z]\w*)\s*:\s*(.*)")
_SITE = re.compile(r"[A-Za-z_ ]*(\d+)")
_COUNTED = ("count", "group")
_WORDS = ("format", "values", *KEYS)


@dataclass(slots=True)
class _Head:
    """What stands before the data, and how the data are laid out."""

    path: Path
    entries: dict[str, str] = field(default_factory=dict)
    names: list[str] | None = None
    lines: int = 0
    hashes: int = 0
    delimiter: str | None = None
    width: int = 0

    def fail(self, line: int, message: str, column: int | None = None) -> NoReturn:
        """Raise the error of one line."""
        place = f"line {line}" if column is None else f"line {line}, column {column}"
        raise InputError(f"{self.path}: {place}: {message}")

    def split(self, line: str) -> list[str]:
        """Return the cells of a line."""
        return [cell.strip() for cell in line.split(self.delimiter)]


def read(path: Path) -> Table:
    """Return the contents of a text file.

    Raises
    ------
    InputError
        The file and the line are named: ragged lines, words among the numbers, names that are no sites, counts that are
        not whole or negative, entries of the manifest that are misspelt, given twice, or stand among the data.
    """
    head = _read_head(path)
    names = _names(head)
    manifest, values = _manifest(head, names)
    try:
        rows = np.loadtxt(path, delimiter=head.delimiter, skiprows=head.lines, ndmin=2, encoding="utf-8-sig")
    except ValueError as error:
        _explain(head, error)
    if path.read_bytes().count(b"#") > head.hashes:
        _refuse_late_entries(head)
    sites = [k for k, name in enumerate(names) if name not in _COUNTED]
    return Table(
        rows if len(sites) == len(names) else rows[:, sites],
        str(path),
        values,
        manifest,
        _whole(rows, names, "count", head),
        _whole(rows, names, "group", head),
        lambda row, column: f"line {_line_of(head, row)}, column {sites[column] + 1}",
    )


def write(file: IO[bytes], spins: NDArray[np.int8], manifest: Manifest, groups: NDArray[np.int64] | None) -> None:
    """Write samples as comma-separated text, with the manifest at its head."""
    n = spins.shape[1]
    lines = [f"# format: {FORMAT} {VERSION}", "# values: spins"]
    for key, value in manifest.to_dict().items():
        lines.append(f"# {key}: {value if isinstance(value, str) else json.dumps(value)}")
    if manifest.sites is not None or groups is not None:
        names = ["spin"] * n if manifest.sites is None else [f"s{label}" for label in manifest.sites.tolist()]
        lines.append(",".join((["group"] if groups is not None else []) + names))
    file.write(("\n".join(lines) + "\n").encode())
    cells = np.empty((len(spins), n, 3), dtype=np.uint8)
    cells[..., 0] = np.where(spins > 0, ord("+"), ord("-"))
    cells[..., 1] = ord("1")
    cells[..., 2] = ord(",")
    cells[:, -1, 2] = ord("\n")
    if groups is None:
        file.write(cells.tobytes())
        return
    rows = cells.reshape(len(spins), -1)
    for group, row in zip(groups.tolist(), rows, strict=True):
        file.write(b"%d," % group + row.tobytes())


def _lines(path: Path) -> Iterator[tuple[int, str]]:
    """Give number and text of each line."""
    with path.open(encoding="utf-8-sig", errors="replace") as file:
        for number, line in enumerate(file, start=1):
            yield number, line.strip()


def _data_lines(head: _Head) -> Iterator[tuple[int, str]]:
    """Give number and text of each line of data, comments cut off."""
    for number, line in _lines(head.path):
        data = line.split("#", 1)[0].strip()
        if number > head.lines and data:
            yield number, data


def _read_head(path: Path) -> _Head:
    head = _Head(path)
    for number, line in _lines(path):
        if line.startswith("#"):
            head.hashes += line.count("#")
            _entry(head, number, line)
            continue
        if not line:
            continue
        if head.delimiter is None and head.names is None:
            head.delimiter = next((mark for mark in ";," if mark in line), None)
        cells = head.split(line.split("#", 1)[0])
        if head.names is None and not all(map(_is_number, cells)):
            head.names = [cell.strip("\"'").strip() for cell in cells]
            head.lines = number
            head.hashes += line.count("#")
            _check_names(head, number)
            continue
        if head.names is not None and len(cells) != len(head.names):
            head.fail(number, f"{len(cells)} values under {len(head.names)} names")
        head.lines, head.width = number - 1, len(cells)
        return head
    raise InputError(f"{path}: the file holds no shots; a sample file holds at least one line of spins")


def _entry(head: _Head, number: int, line: str) -> None:
    found = _ENTRY.match(line)
    if not found:
        return
    key, value = found.group(1), found.group(2).strip()
    if key not in _WORDS:
        near = difflib.get_close_matches(key.lower(), _WORDS, n=1, cutoff=0.8)
        if near:
            head.fail(number, f"{key!r} is no entry of a manifest; did you mean {near[0]!r}?")
        return
    if key in head.entries:
        head.fail(number, f"{key!r} is given for the second time")
    head.entries[key] = value


def _is_number(cell: str) -> bool:
    try:
        float(cell)
    except ValueError:
        return not cell
    return True


def _check_names(head: _Head, number: int) -> None:
    names = head.names or []
    wrong = [k for k, name in enumerate(names) if name not in (*_COUNTED, "spin") and not _SITE.fullmatch(name)]
    if wrong:
        # a word among numbers is more likely the slip than the numbers are
        column = min(wrong, key=lambda k: _is_number(names[k]))
        head.fail(
            number,
            f"{names[column]!r} is neither a value nor the name of a column; names are a word with a device label such "
            "as s12 for a site (or spin for every site), count and group",
            column + 1,
        )
    for name in _COUNTED:
        if names.count(name) > 1:
            head.fail(number, f"there are {names.count(name)} columns {name!r}; at most one is allowed")
    sites = [name for name in names if name not in _COUNTED]
    if not sites:
        head.fail(number, "no column of spins is named")
    if "spin" in sites and set(sites) != {"spin"}:
        head.fail(number, "some sites are named by a label and some are just called spin; label all or none")


def _names(head: _Head) -> list[str]:
    return ["spin"] * head.width if head.names is None else head.names


def _manifest(head: _Head, names: list[str]) -> tuple[Manifest, str | None]:
    entries = dict(head.entries)
    check_format(entries.pop("format", None), str(head.path))
    values = entries.pop("values", None)
    if values not in (None, "spins", "bits"):
        raise InputError(f"{head.path}: values must be spins (+1 and -1) or bits (0 and 1); got {values!r}")
    plain = {key: _plain(key, value, head.path) for key, value in entries.items()}
    manifest = Manifest.from_dict(plain, str(head.path))
    labels = [int(found.group(1)) for name in names if (found := _SITE.fullmatch(name))]
    if labels:
        named = Manifest.from_dict({"sites": labels}, f"{head.path}: names of the columns")
        manifest = manifest.merged(named, (f"{head.path}: the entry", "the names of the columns"))
    return manifest, values


def _plain(key: str, value: str, path: Path) -> Any:
    """Return the value of an entry as number, truth value, list or text."""
    try:
        if key in ("gauge", "sites"):
            return [float(item) for item in value.strip("[]() ").replace(",", " ").split()]
        if key in ("duration", "batch"):
            return float(value)
        if key == "undone":
            return {"true": True, "false": False}[value.lower()]
    except (ValueError, KeyError) as error:
        raise InputError(f"{path}: the entry {key} is not readable: {value!r}") from error
    return value


def _whole(rows: NDArray[np.float64], names: list[str], name: str, head: _Head) -> NDArray[np.int64] | None:
    """Return the column of counts or groups, or None where there is none."""
    if name not in names:
        return None
    column = rows[:, names.index(name)]
    low = 0 if name == "count" else -(2**53)
    bad = ~(np.isfinite(column) & (column == np.round(column)) & (column >= low) & (column <= 2**53))
    if bad.any():
        row = int(bad.argmax())
        allowed = "a whole number of at least 0" if name == "count" else "a whole number"
        head.fail(_line_of(head, row), f"a {name} must be {allowed}; got {column[row]:g}", names.index(name) + 1)
    return column.astype(np.int64)


def _line_of(head: _Head, row: int) -> int:
    """Return the number of the line that holds a row of data."""
    return next(number for k, (number, _) in enumerate(_data_lines(head)) if k == row)


def _explain(head: _Head, error: ValueError) -> NoReturn:
    """Find the line that could not be read, and say what is wrong with it."""
    for number, line in _data_lines(head):
        cells = head.split(line)
        for column, cell in enumerate(cells, start=1):
            if not cell:
                head.fail(number, "the value is missing", column)
            if not _is_number(cell):
                head.fail(number, f"{cell!r} is not a number", column)
        if len(cells) != head.width:
            head.fail(number, f"{len(cells)} values, where the first line of data has {head.width}")
    raise InputError(f"{head.path}: not readable as lines of numbers: {error}") from error


def _refuse_late_entries(head: _Head) -> None:
    """Refuse entries of a manifest among the data: two files joined end to end are two runs."""
    for number, line in _lines(head.path):
        if number > head.lines and (found := _ENTRY.match(line)) and found.group(1) in _WORDS:
            head.fail(
                number,
                f"an entry of the manifest ({found.group(1)}) among the data; read the runs from files of their own "
                "and join them with Samples.concatenate",
            )
