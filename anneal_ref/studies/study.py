"""A study: which instances, which durations, whose samples, and what limit they must meet.

A study is a TOML file that is pleasant to write by hand. Paths are relative to it.

    format = 1                                   # of this file
    name = "Acceptance of the processor, spring"
    description = "What is tested and for whom."  # optional
    durations = [2.0, 5.0]                       # every instance at each of these (ns)

    [schedule]                                   # one of three forms
    file = "schedule.csv"                        # 1. columns s, transverse, problem
    # s = [0.0, 0.5, 1.0]                        # 2. the table itself
    # transverse = [20.0, 5.0, 0.0]
    # problem = [0.0, 4.0, 10.0]
    # transverse_polynomial = [20.0, -20.0]      # 3. coefficients of 1, s, s^2 ...
    # problem_polynomial = [0.0, 10.0]
    unit = "rad/ns"                              # or "GHz" (multiplied by 2 pi), or "1"; a CSV file may say it itself
    prefactor = 1.0                              # 0.5 for tables of a Hamiltonian written with halves; likewise
    interpolation = "pchip"                      # or "linear"

    [waveform]                                   # optional: s against the fraction u of the duration, here with a pause
    u = [0.0, 0.4, 0.6, 1.0]
    s = [0.0, 0.5, 0.5, 1.0]

    [truth]                                      # optional, these are the defaults
    tolerance = 1e-3                             # largest absolute error over all <Z_i> and <Z_i Z_j>
    samples = 16384                              # stored shots of the truth
    seed = 0
    start = "plus"                               # or "ground"
    budget = 3600.0                              # seconds that one case may take
    backend = { kind = "MPS", bond_dimension = 16 }   # default: the cheapest that does; settings of the coarsest run

    [acceptance]
    correlation_error = 0.10                     # largest allowed correlation error, pooled over the instances
    magnetisation_error = 0.10                   # largest allowed root mean square of <Z> - true <Z>, over instances
                                                 # with fields; the default is the limit above
    residual_energy = 0.05                       # optional: largest allowed |processor - truth|, per spin
    order_parameter = 0.05                       # optional: largest allowed |processor - truth| of q2
    level = 0.95                                 # confidence of the verdict

    [[instance]]                                 # as many as you like
    name = "ladder"
    lattice = { kind = "ladder", n = 6, periodic = true, dead = [3] }   # a function of `anneal_ref.lattices`
    couplings = { law = "plus_minus" }           # or a list of numbers; laws and their keys are named below
    fields = { law = "gaussian", sigma = 0.1 }   # optional, and so is transverse (weights of the transverse field)
    seed = 11                                    # names the ensemble; the same seed gives the same numbers everywhere
    index = 0                                    # its member

    [[instance]]
    name = "graph"
    file = "graph.json"                          # written by `Instance.write`

    [samples]
    files = "samples/{instance}_{duration}ns_*.csv"   # all files that match, or a list of such patterns
    values = "bits"                              # of files that do not say: "spins": +1, -1; "bits": 0 (up), 1 (down)

In place of `durations` and `samples.files`, the cases can be listed one by one, each an instance at a duration:

    [[case]]                                     # as many as you like, each pair of instance and duration once
    instance = "ladder"                          # the name of an [[instance]]
    duration = 2.0
    samples = ["a.csv", "b.csv"]                 # a file or pattern, or a list of them; may be left out at first

The order of work: write the study and `plan` it, compute its truth (`reference`), measure on the processor, `plan`
again to check the files, `assess`. So neither the samples nor `[samples]` need be there before `assess` asks for them.
The files of one case are its gauges or batches; the same file twice, or a copy of it, is refused.

Laws: `plus_minus`; `gaussian` with sigma; `uniform` with low, high; `levels` with k, zero; `constant` with value.
Everything is checked before any work starts: unknown keys, values, missing files of schedules and instances, NaN and
infinity.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from anneal_ref.backends.contract import Backend
from anneal_ref.base.errors import AnnealRefError, InputError, StudyError
from anneal_ref.judgement.equivalence import Acceptance
from anneal_ref.model.anneal import Anneal, Waveform
from anneal_ref.model.schedules import Schedule
from anneal_ref.observe.samples import Samples
from anneal_ref.studies.building import make_backend, make_instance, make_schedule, nearest
from anneal_ref.studies.sample_files import Values, find_files, read_samples, read_with_note, refuse_copies
from anneal_ref.studies.schema import StudyTable, read_table

_VALUES_BY = "the key `values` in [samples] of the study"


@dataclass(frozen=True, slots=True)
class Case:
    """One instance at one duration, with the files of its samples.

    Parameters
    ----------
    name : str
        Name of the instance in the study.
    anneal : Anneal
    files : tuple of Path
        Samples files; each is a gauge or batch of its own.
    values : str, optional
        "spins" or "bits", of files that do not say.
    missing : tuple of str
        A sentence for each samples file or pattern of the study that no file fits yet.
    """

    name: str
    anneal: Anneal
    files: tuple[Path, ...]
    values: Values = None
    missing: tuple[str, ...] = ()

    @property
    def label(self) -> str:
        """Instance and duration, for tables."""
        return f"{self.name}, {self.anneal.duration:g} {time_unit(self.anneal.schedule)}".strip()

    @property
    def sha256(self) -> str:
        """Hash of the bytes of all files, one after the other in the order of `files`."""
        total = hashlib.sha256()
        for file in self.files:
            total.update(file.read_bytes())
        return total.hexdigest()

    def samples(self) -> Samples:
        """Read the files and check that they belong to this instance and duration.

        Raises
        ------
        StudyError
            Files that are not there (yet).
        InputError
            A file that is malformed, or that says it belongs to another instance or duration; the same file twice.

        Warns
        -----
        AnnealRefWarning
            Some files give a gauge (or a batch) and others none.
        """
        self._require_files()
        return read_samples(self.files, self.anneal, self.values, _VALUES_BY)

    def samples_with_note(self) -> tuple[Samples, str | None]:
        """Return what `samples` does, and instead of its warning what it says."""
        self._require_files()
        return read_with_note(self.files, self.anneal, self.values, _VALUES_BY)

    def _require_files(self) -> None:
        if self.missing or not self.files:
            what = "; ".join(self.missing) or "the study names no samples files for it"
            raise StudyError(
                f"case '{self.label}' lacks samples: {what}; without them it can only be planned and solved"
            )


@dataclass(frozen=True, slots=True)
class Study:
    """A study that has been read and checked.

    Parameters
    ----------
    name, description : str
    path : Path
        The file it came from.
    sha256 : str
        Hash of that file's bytes.
    schedule : Schedule
    cases : tuple of Case
        Instances run slowest, in the order of the file.
    table : StudyTable
        The file's contents, defaults filled in.
    backend : Backend, optional
        What the truth is made with, where the file says so.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> from anneal_ref.views.demo import copy_demo
    >>> folder = copy_demo("saltmarsh", Path(tempfile.mkdtemp()) / "saltmarsh")
    >>> study = Study.read(folder / "study.toml")
    >>> len(study.cases)
    6
    """

    name: str
    description: str
    path: Path
    sha256: str
    schedule: Schedule
    cases: tuple[Case, ...]
    table: StudyTable
    backend: Backend | None = None

    @property
    def acceptance(self) -> Acceptance:
        """The limits that the processor must meet."""
        return Acceptance(**self.table.acceptance.model_dump())

    def problems(self) -> tuple[str, ...]:
        """Return what is wrong with the samples that are there, a sentence each; cases without any are passed over."""
        found = []
        for case in self.cases:
            if case.files:
                try:
                    case.samples()
                except AnnealRefError as error:
                    found.append(str(error))
        try:
            refuse_copies(file for case in self.cases for file in case.files)
        except InputError as error:
            found.append(str(error))
        return tuple(dict.fromkeys(found))

    @classmethod
    def read(cls, path: str | Path) -> Study:
        """Read and check a study file; samples are looked for and not read.

        Raises
        ------
        StudyError
            Anything that is not allowed, with file, key, value, what is allowed and the nearest known key; a missing
            file of the schedule or of an instance.
        """
        path = Path(path)
        table = read_table(path)
        schedule = make_schedule(table.schedule, path)
        instances = {one.name: make_instance(one, k, path) for k, one in enumerate(table.instance)}
        cases = []
        for name, duration, patterns, where in _pairs(table, path):
            if name not in instances:
                known = ", ".join(f"'{one}'" for one in instances)
                raise StudyError(
                    f"{path}: `{where}.instance` = '{name}': no such instance; there are "
                    f"{known}{nearest(name, instances)}"
                )
            try:
                waveform = (
                    None if table.waveform is None else Waveform(np.array(table.waveform.u), np.array(table.waveform.s))
                )
                anneal = Anneal(instances[name], schedule, duration, table.truth.start, waveform)
            except AnnealRefError as error:
                raise StudyError(f"{path}: instance '{name}' at duration {duration:g}: {error}") from error
            files, missing = find_files(patterns, name, duration, path, where)
            cases.append(Case(name, anneal, files, table.samples.values, missing))
        sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
        backend = make_backend(table.truth.backend, path)
        return cls(table.name, table.description, path, sha256, schedule, tuple(cases), table, backend)


def time_unit(schedule: Schedule) -> str:
    """Return the unit of durations under a schedule: ns, or nothing where the schedule has no unit."""
    return "ns" if schedule.unit == "rad/ns" else ""


def _pairs(table: StudyTable, path: Path) -> list[tuple[str, float, list[str], str]]:
    """List (instance, duration, file patterns, key) of every case, in the order of the file."""
    if table.case is not None:
        cases = [
            (one.instance, float(one.duration), _listed(one.samples or []), f"case[{k}]")
            for k, one in enumerate(table.case)
        ]
        for k, one in enumerate(cases):
            if any(one[:2] == other[:2] for other in cases[:k]):
                raise StudyError(
                    f"{path}: `case[{k}]` comes twice: instance '{one[0]}' at duration {one[1]:g}; list all files in "
                    "one case"
                )
        return cases
    patterns = _listed(table.samples.files or [])
    return [
        (one.name, float(duration), patterns, "samples") for one in table.instance for duration in table.durations or []
    ]


def _listed(value: str | Sequence[str]) -> list[str]:
    return [value] if isinstance(value, str) else list(value)
