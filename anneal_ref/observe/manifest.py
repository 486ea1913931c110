"""`Manifest`: what a run was, so that its samples cannot be paired with the wrong truth."""

from __future__ import annotations

import difflib
import json
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, frozen, integer, positive, signs
from anneal_ref.base.errors import InputError

FORMAT = "anneal_ref samples"
VERSION = 1


@dataclass(frozen=True, slots=True, eq=False)
class Manifest:
    """What travels with the samples of one run. Everything is optional; what is there is held against the truth.

    Parameters
    ----------
    instance : str, optional
        Identity of the instance (64 hexadecimal digits): the one that was meant, *before* any gauge.
    duration : float, optional
        Anneal duration, in the unit of the schedule (ns with rad/ns).
    gauge : array_like of +1 and -1, shape (n_columns,), optional
        The signs g with which the run was programmed (J_ij g_i g_j, h_i g_i), in the order of the columns.
    undone : bool
        Whether the spins have been multiplied by `gauge` already. Samples with a gauge that is not undone give no
        moments.
    batch : int, optional
        Which submission or calibration period the run belongs to.
    sites : array_like of int, shape (n_columns,), optional
        Device label of each column.
    source : str, optional
        Who or what made the samples.

    Raises
    ------
    InputError
        A value that is not allowed; labels that occur twice; a gauge and sites of different lengths.

    Examples
    --------
    >>> Manifest(duration=7, gauge=[1, -1, 1], source="Saltmarsh").to_dict()["gauge"]
    [1, -1, 1]
    """

    instance: str | None = None
    duration: float | None = None
    gauge: NDArray[np.int8] | None = None
    undone: bool = False
    batch: int | None = None
    sites: NDArray[np.int64] | None = None
    source: str | None = None

    def __init__(
        self,
        instance: str | None = None,
        duration: float | None = None,
        gauge: ArrayLike | None = None,
        undone: bool = False,
        batch: int | None = None,
        sites: ArrayLike | None = None,
        source: str | None = None,
    ) -> None:
        if instance is not None and not (
            isinstance(instance, str) and len(instance) == 64 and set(instance) <= set("0123456789abcdef")
        ):
            raise InputError(f"instance must be an identity of 64 hexadecimal digits (0-9, a-f); got {instance!r}")
        if not isinstance(undone, bool):
            raise InputError(f"undone must be true or false; got {undone!r}")
        if undone and gauge is None:
            raise InputError("undone is set, but there is no gauge that could have been undone; give the gauge too")
        if source is not None and not (isinstance(source, str) and source.isprintable() and source == source.strip()):
            raise InputError(f"source must be one line of text without white space around it; got {source!r}")
        put = object.__setattr__
        put(self, "instance", instance)
        put(self, "duration", None if duration is None else positive("duration", duration))
        put(self, "gauge", None if gauge is None else signs("gauge", gauge, (None,)))
        put(self, "undone", undone)
        put(self, "batch", None if batch is None else integer("batch", batch))
        put(self, "sites", None if sites is None else _labels(sites))
        put(self, "source", source)
        if self.gauge is not None and self.sites is not None and len(self.gauge) != len(self.sites):
            raise InputError(
                "gauge and sites must have one entry for each column; "
                f"got {len(self.gauge)} signs and {len(self.sites)} sites"
            )

    @property
    def n_columns(self) -> int | None:
        """Number of columns that gauge or sites speak of; None where neither is given."""
        for value in (self.gauge, self.sites):
            if value is not None:
                return len(value)
        return None

    def replace(self, **changes: Any) -> Manifest:
        """Return a copy with some entries changed."""
        return Manifest(**({entry.name: getattr(self, entry.name) for entry in fields(self)} | changes))

    def to_dict(self) -> dict[str, Any]:
        """Return what is set, as plain numbers, strings and lists."""
        values = {entry.name: getattr(self, entry.name) for entry in fields(self)}
        plain = {name: value.tolist() if isinstance(value, np.ndarray) else value for name, value in values.items()}
        return {name: value for name, value in plain.items() if value is not None and value is not False}

    @classmethod
    def from_dict(cls, values: dict[str, Any], where: str) -> Manifest:
        """Return the manifest of a mapping; `where` starts every message.

        Raises
        ------
        InputError
            An unknown key (the nearest known one is named) or a value that is not allowed.
        """
        known = KEYS
        for key in values:
            if key not in known:
                near = difflib.get_close_matches(str(key), known, n=1)
                hint = f"; did you mean {near[0]!r}?" if near else ""
                raise InputError(f"{where}: {key!r} is no key of a manifest; known are {', '.join(known)}{hint}")
        try:
            return cls(**values)
        except InputError as error:
            raise InputError(f"{where}: {error}") from error

    def merged(self, other: Manifest, names: tuple[str, str]) -> Manifest:
        """Return what either of two manifests of one run says; refuse them where they differ or do not go together."""
        mine, yours = self.to_dict(), other.to_dict()
        for key in mine.keys() & yours.keys():
            if mine[key] != yours[key]:
                raise InputError(
                    f"{names[0]} and {names[1]} differ in {key}: {_short(mine[key])} against {_short(yours[key])}; "
                    "correct one of them"
                )
        return Manifest.from_dict(mine | yours, f"{names[0]} and {names[1]}")

    def to_json(self) -> str:
        """Return the text of a sidecar file."""
        return json.dumps({"format": f"{FORMAT} {VERSION}"} | self.to_dict(), indent=1) + "\n"

    @classmethod
    def from_json(cls, text: str, where: str) -> Manifest:
        """Return the manifest of the text of a sidecar file; `where` starts every message."""
        try:
            values = json.loads(text)
        except ValueError as error:
            raise InputError(f"{where}: not readable as JSON: {error}") from error
        if not isinstance(values, dict):
            raise InputError(f"{where}: a manifest is a JSON object of key and value; got {type(values).__name__}")
        check_format(values.pop("format", None), where)
        return cls.from_dict(values, where)


KEYS = tuple(entry.name for entry in fields(Manifest))


def check_format(text: Any, where: str) -> None:
    """Raise `InputError` unless the format line is absent or names the version that this package reads."""
    if text is not None and text != f"{FORMAT} {VERSION}":
        raise InputError(f"{where}: this package reads the format '{FORMAT} {VERSION}'; got {text!r}")


def _labels(sites: ArrayLike) -> NDArray[np.int64]:
    array = finite("sites", sites, (None,))
    labels = array.astype(np.int64)
    if np.any(labels != array) or np.any(labels < 0):
        bad = array[(labels != array) | (labels < 0)][0]
        raise InputError(f"sites must be whole numbers of at least 0; got {bad}")
    values, counts = np.unique(labels, return_counts=True)
    if np.any(counts > 1):
        raise InputError(f"sites must differ from each other; {values[counts > 1].tolist()} occur more than once")
    return frozen(labels)


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."
