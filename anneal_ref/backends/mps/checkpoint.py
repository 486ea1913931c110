"""A long evolution keeps its state in a file, and goes on from there to the same result.

The file is a record of `base.storage`, written at the end of a step. It holds all that the rest of the evolution
depends on (the tensors as pairs of real numbers in their own precision, the counters, the energies noted so far) and
says what it is the state of: the anneal, the settings, the time asked for, the kicks, and the version of the library. A
file of anything else is refused and left as it is.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from time import monotonic

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.contract import Kick
from anneal_ref.backends.mps.product import Product
from anneal_ref.base.errors import AnnealRefWarning, ArchiveError, InputError
from anneal_ref.base.identity import digest
from anneal_ref.base.provenance import library_version
from anneal_ref.base.storage import Record, read_record, write_record
from anneal_ref.model.anneal import Anneal

Subject = Mapping[str, str | float]
"""What a checkpoint is the state of, by the names of what can differ."""

KIND = "checkpoint"
VERSION = 1

_COUNTERS = ("steps", "two_site_steps", "kicks", "exponentials", "vectors", "largest")
_COUNT, _START = "count_", "start_"


@dataclass(slots=True, eq=False)
class Saved:
    """An evolution at the end of a step.

    Parameters
    ----------
    product : Product
        The state, before the kicks that are due at this time.
    steps, two_site_steps, kicks : int
        Steps done, those of them in which all bonds were updated by two sites, and kicks given.
    exponentials, vectors, largest : int
        Local exponentials, their Lanczos vectors, largest bond so far.
    discarded : ndarray, shape (N + 1,), optional
        Weight discarded at every bond, the outer ones included; none by default.
    times, parts : ndarrays, shapes (notes,) and (notes, 2)
        The energies noted so far (see `Work`); empty before the first of them.
    seconds : float
        Wall time so far.
    start : dict of str to float
        What the ledger says of the start.
    """

    product: Product
    steps: int = 0
    two_site_steps: int = 0
    kicks: int = 0
    exponentials: int = 0
    vectors: int = 0
    largest: int = 0
    discarded: NDArray[np.float64] | None = None
    times: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0))
    parts: NDArray[np.float64] = field(default_factory=lambda: np.zeros((0, 2)))
    seconds: float = 0.0
    start: dict[str, float] = field(default_factory=dict)


class Checkpoint:
    """The file of one evolution, and when it is due to be written.

    Parameters
    ----------
    path : path
    every : float
        Seconds between two writes.
    subject : mapping
        What is computed; see `subject_of`.

    Raises
    ------
    InputError
        The path is that of a folder, or its folder does not exist.
    """

    def __init__(self, path: Path, every: float, subject: Subject) -> None:
        if path.is_dir() or not path.parent.is_dir():
            raise InputError(f"checkpoint must be a file in a folder that exists; got {path}")
        self.path, self.every, self.subject = path, every, subject
        self._last: float | None = None

    @property
    def is_due(self) -> bool:
        """Whether the file is older than it may be."""
        return self._last is None or monotonic() - self._last >= self.every

    def read(self) -> Saved | None:
        """Return what the file holds, or None if there is no file.

        Raises
        ------
        InputError, ArchiveError
            The state of another computation; a damaged file, or no checkpoint at all.
        """
        if not self.path.exists():
            return None
        saved = read_saved(self.path, self.subject)
        self._last = monotonic()
        return saved

    def write(self, saved: Saved) -> None:
        """Write the file; a refusal is an error the first time, and later on a warning.

        Hours of work must not be lost because a disk is full.
        """
        first, self._last = self._last is None, monotonic()
        try:
            write_saved(self.path, self.subject, saved)
        except ArchiveError as error:
            if first:
                raise
            warnings.warn(
                f"the state after {saved.steps} steps was not kept, the evolution goes on: {error}",
                AnnealRefWarning,
                stacklevel=2,
            )


def subject_of(anneal: Anneal, backend: object, at: float, kicks: tuple[Kick, ...]) -> Subject:
    """Return what tells one evolution from all others: whatever can change a digit of its state."""
    return {
        "anneal": anneal.identity,
        "settings": repr(backend),
        "at": at,
        "kicks": digest(kicks),
        "library": library_version(),
    }


def write_saved(path: Path, subject: Subject, saved: Saved) -> None:
    """Write a checkpoint in one step; a file of that name is replaced.

    Raises
    ------
    ArchiveError
        The file system refuses.
    """
    product = saved.product
    numbers = np.concatenate([tensor.ravel() for tensor in product.tensors])
    arrays = {
        "tensors": numbers.view(numbers.real.dtype).reshape(-1, 2),
        "sectors": np.array(product.dims, dtype=np.int64),
        "order": np.array(product.order, dtype=np.int64),
        "discarded": np.zeros(product.n_sites + 1) if saved.discarded is None else saved.discarded,
    }
    dims: dict[str, tuple[str, ...]] = {
        "tensors": ("element", "part"),
        "sectors": ("bond", "parity"),
        "order": ("place",),
        "discarded": ("bond",),
    }
    if len(saved.times):
        arrays |= {"times": saved.times, "energies": saved.parts}
        dims |= {"times": ("note",), "energies": ("note", "term")}
    attributes: dict[str, str | int | float] = {
        "kind": KIND,
        "version": VERSION,
        "identity": digest(subject),
        **subject,
        "symmetric": int(product.symmetric),
        "seconds": saved.seconds,
        **{_COUNT + name: getattr(saved, name) for name in _COUNTERS},
        **{_START + name: value for name, value in saved.start.items()},
    }
    write_record(path, Record(attributes, arrays, dims))


def read_saved(path: Path, subject: Subject) -> Saved:
    """Read the checkpoint of one computation.

    Raises
    ------
    InputError
        The file holds the state of another one.
    ArchiveError
        The file is damaged, or no checkpoint.
    """
    try:
        record = read_record(path)
    except ArchiveError as error:
        raise _unusable(path, error.problem) from error
    held = record.attributes
    if held.get("kind") != KIND:
        raise _unusable(path, f"it holds {held.get('kind', 'something else')}, not a checkpoint")
    if held["identity"] != digest(subject):
        other = ", ".join(name for name, value in subject.items() if held.get(name) != value) or "format"
        raise InputError(
            f"the checkpoint {path} belongs to another computation (it differs in {other}): "
            f"{len(record.arrays['order'])} spins after {held[_COUNT + 'steps']} steps up to {held['at']:g} of the "
            f"duration with {held['settings']}; give each computation a file of its own, or remove this one if nobody "
            "needs it"
        )
    arrays, symmetric = record.arrays, bool(held["symmetric"])
    dims = [(int(even), int(odd)) for even, odd in arrays["sectors"]]
    numbers = arrays["tensors"].view(np.result_type(arrays["tensors"], np.complex64))[:, 0]
    shapes = [(1 if symmetric else 2, sum(left), sum(right)) for left, right in zip(dims[:-1], dims[1:], strict=True)]
    places = np.cumsum([0, *(int(np.prod(shape)) for shape in shapes)])
    tensors = [
        numbers[start:stop].reshape(shape).copy()
        for start, stop, shape in zip(places[:-1], places[1:], shapes, strict=True)
    ]
    return Saved(
        Product(tensors, dims, symmetric, arrays["order"].astype(np.intp)),
        **{name: int(held[_COUNT + name]) for name in _COUNTERS},
        discarded=arrays["discarded"].copy(),
        times=arrays.get("times", np.zeros(0)),
        parts=arrays.get("energies", np.zeros((0, 2))),
        seconds=float(held["seconds"]),
        start={name.removeprefix(_START): float(held[name]) for name in held if name.startswith(_START)},
    )


def _unusable(path: Path, problem: str) -> ArchiveError:
    return ArchiveError(
        f"cannot continue from the checkpoint {path}: {problem}; remove it to start anew, or give another file",
        path=str(path),
        problem=problem,
    )
