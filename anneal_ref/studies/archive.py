"""`Archive`: a folder of references, one sealed file each, that a sceptic can verify and recompute."""

from __future__ import annotations

import math
import os
import warnings
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from anneal_ref.base.checks import integer, number
from anneal_ref.base.errors import AnnealRefError, AnnealRefWarning, ArchiveError, InputError, in_words
from anneal_ref.base.run import Run
from anneal_ref.base.storage import PART, Record, read_record, write_record
from anneal_ref.model.anneal import Anneal
from anneal_ref.studies.audit import BARS, Audit, AuditRow, deviation, inconsistency
from anneal_ref.studies.records import from_record, to_record
from anneal_ref.studies.text import aligned
from anneal_ref.truth.reference import Reference

SUFFIX = ".h5"


class Archive:
    """A folder with one file per reference, `<identity>.h5`.

    The name starts with 32 digits of the identity of the anneal, so that a look-up by anneal opens only files of that
    anneal; 16 digits of the settings follow. Files are written aside and renamed: several processes may add to one
    folder, and an interrupt leaves finished references whole.

    Parameters
    ----------
    folder : path
    create : bool
        Make the folder when it is not there.

    Raises
    ------
    ArchiveError
        The folder cannot be made, or is something else.

    Examples
    --------
    >>> import tempfile
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> instance = ar.draw_instance(ar.lattices.square(2, 3), ar.disorder.plus_minus(), seed=1)
    >>> anneal = ar.Anneal(instance, schedule, duration=1.0)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     archive = ar.Archive(folder)
    ...     path = archive.add(ar.reference(anneal, tolerance=1e-3))
    ...     archive.find(anneal, tolerance=1e-3).outcome, archive.audit(recompute=1.0).sound
    ('converged', True)
    """

    def __init__(self, folder: str | os.PathLike[str], create: bool = True) -> None:
        self.folder = Path(folder)
        if create:
            try:
                self.folder.mkdir(parents=True, exist_ok=True)
            except OSError as error:
                problem = in_words(error)
                raise _unusable(self.folder, problem, "give a folder that exists or can be made") from error
        elif self.folder.exists() and not self.folder.is_dir():
            raise _unusable(self.folder, "it is not a folder", "give the folder that holds the references")

    def __repr__(self) -> str:
        """Return folder and number of files."""
        return f"<Archive {self.folder}: {len(self)} references>"

    def __len__(self) -> int:
        """Return the number of files, damaged ones included."""
        return len(self.list())

    def __iter__(self) -> Iterator[Reference]:
        """Read one reference after the other; a damaged file raises."""
        return (self.open(identity) for identity in self.list())

    def path(self, identity: str) -> Path:
        """Return where the reference of that identity is, or would be."""
        return self.folder / f"{identity}{SUFFIX}"

    def list(self) -> tuple[str, ...]:
        """Return the identities in the folder by name, in alphabetical order; files are not opened."""
        return tuple(sorted(path.name.removesuffix(SUFFIX) for path in self.folder.glob(f"*{SUFFIX}")))

    def add(self, reference: Reference) -> Path:
        """Write a reference and return its file; one that is there already, and is whole, stays as it is.

        Raises
        ------
        InputError
            Something else than a reference.
        ArchiveError
            The folder is read-only, the disk is full, ...; nothing half-written is left.
        """
        if not isinstance(reference, Reference):
            raise InputError(f"an archive holds references, made by anneal_ref.reference(anneal); got {reference!r}")
        path = self.path(reference.identity)
        return path if self.contains(reference.identity) else write_record(path, to_record(reference))

    def contains(self, identity: str) -> bool:
        """Return whether a whole file with that identity inside is there."""
        try:
            self.open(identity)
        except ArchiveError:
            return False
        return True

    def open(self, identity: str) -> Reference:
        """Read the reference of that identity.

        Raises
        ------
        ArchiveError
            No such file, a damaged one, or one that holds another reference than its name says.
        """
        return self._read(identity)[1]

    def find(self, anneal: Anneal, tolerance: float = 1e-3) -> Reference | None:
        """Return the best reference for an anneal whose measured error is within the tolerance, or None.

        Whatever its back-end and the tolerance that it was made for: what counts is what was measured.

        Warns
        -----
        AnnealRefWarning
            A file of this anneal is damaged and was passed over.
        """
        tolerance = number("tolerance", tolerance, 0.0, 1.0)
        best: Reference | None = None
        for path in sorted(self.folder.glob(f"{anneal.identity[:32]}-*{SUFFIX}")):
            try:
                found = self.open(path.name.removesuffix(SUFFIX))
            except ArchiveError as error:
                warnings.warn(f"passed over a reference: {error}", AnnealRefWarning, stacklevel=2)
                continue
            fits = found.anneal.identity == anneal.identity and found.settled and found.error <= tolerance
            if fits and (best is None or found.error < best.error):
                best = found
        return best

    def table(self) -> str:
        """Return a readable table with a row for each file."""
        rows = [("instance", "spins", "duration", "tolerance", "error", "outcome", "back-end", "identity")]
        for identity in self.list():
            try:
                found = self.open(identity)
            except ArchiveError as error:
                rows.append(("-", "-", "-", "-", "-", f"unusable: {error.problem}", "-", identity))
                continue
            rows.append(
                (
                    found.anneal.instance.name,
                    str(found.n_sites),
                    f"{found.anneal.duration:g}",
                    f"{found.tolerance:g}",
                    f"{found.error:.2g}",
                    found.outcome,
                    type(found.backend).__name__,
                    identity,
                )
            )
        return aligned(rows, left=(0, 5, 6, 7)) if len(rows) > 1 else f"no references in {self.folder}"

    def audit(self, recompute: float = 0.0, seed: int = 0, run: Run = Run()) -> Audit:  # noqa: B008
        """Verify every file, and solve a part of the references again.

        Every file: all bytes against the checksums, the name against the identity of what is inside, the stored error
        bars against those that the stored runs give, probabilities and samples against the moments. A seeded choice of
        references is also evolved again, from nothing but what its file holds and with the step halved once more than
        in the finest run; the result must lie within the stored error bars.

        Nothing is changed or deleted, and no damage stops the audit.

        Parameters
        ----------
        recompute : float
            Fraction of the whole references to solve again, from 0 to 1, rounded up.
        seed : int
            Of the choice.
        run : Run
            Threads and progress.

        Raises
        ------
        ArchiveError
            There is no such folder.
        """
        fraction, seed = number("recompute", recompute, 0.0, 1.0), integer("seed", seed, low=0)
        if not self.folder.is_dir():
            raise _unusable(self.folder, "there is no such folder", "check its name")
        identities = self.list()
        problems = {identity: self._problem(identity) for identity in identities}
        whole = [identity for identity in identities if problems[identity] is None]
        chosen = np.random.default_rng(seed).permutation(len(whole))[: math.ceil(fraction * len(whole))]
        deviations: dict[str, float] = {}
        with run.track(len(chosen), "audit") as bar:
            for identity in sorted(whole[k] for k in chosen):
                try:
                    deviations[identity] = deviation(self.open(identity), run)
                except AnnealRefError as error:
                    problems[identity] = f"it cannot be recomputed: {error}"
                else:
                    if not deviations[identity] <= BARS:
                        problems[identity] = f"recomputed, it is off by {deviations[identity]:.3g} error bars"
                bar.update()
        return Audit(
            str(self.folder),
            tuple(AuditRow(f"{k}{SUFFIX}", problems[k], deviations.get(k)) for k in identities),
            tuple(sorted(path.name for path in self.folder.glob(f"*{PART}"))),
        )

    def _read(self, identity: str) -> tuple[Record, Reference]:
        path = self.path(identity)
        record = read_record(path)
        reference = from_record(record, path)
        if reference.identity != identity:
            raise _unusable(path, f"it holds reference {reference.identity}", "rename it, or take it out of the folder")
        return record, reference

    def _problem(self, identity: str) -> str | None:
        try:
            record, reference = self._read(identity)
        except ArchiveError as error:
            return error.problem
        return inconsistency(reference, record.arrays)


def read_reference(path: str | os.PathLike[str]) -> Reference:
    """Read a reference from a file of an archive, wherever it lies.

    Raises
    ------
    ArchiveError
        A missing, damaged, foreign or newer file.
    """
    return from_record(read_record(path), Path(path))


def _unusable(path: Path, problem: str, advice: str) -> ArchiveError:
    return ArchiveError(f"cannot use {path}: {problem}; {advice}", path=str(path), problem=problem)
