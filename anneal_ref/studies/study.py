"""A study: which instances, which durations, whose samples, and what limit they must meet.

A study is a TOML file that is pleasant to write by hand. Paths are relative to it.

    format = 1                                   # of this file
    name = "Acceptance of the processor, spring"
    description = "What is tested and for whom."  # optional

    [schedule]                                   # one of three forms
    file = "schedule.csv"                        # 1. columns s, transverse, problem
    # s = [0.0, 0.5, 1.0]                        # 2. the table itself
    # transverse = [20.0, 5.0, 0.0]
    # problem = [0.0, 4.0, 10.0]
    # transverse_polynomial = [20.0, -20.0]      # 3. coefficients of 1, s, s^2 ...
    # problem_polynomial = [0.0, 10.0]
    unit = "rad/ns"                              # or "GHz" (multiplied by 2 pi), or "1" (dimensionless)
    prefactor = 1.0                              # 0.5 for tables of a Hamiltonian written with halves
    interpolation = "pchip"                      # or "linear"

    [truth]                                      # optional, these are the defaults
    tolerance = 1e-3                             # largest absolute error over all <Z_i> and <Z_i Z_j>
    samples = 16384                              # stored shots of the truth
    seed = 0
    start = "plus"                               # or "ground"

    [acceptance]
    correlation_error = 0.10                     # largest allowed correlation error, pooled over the instances
    residual_energy = 0.05                       # optional: largest allowed |processor - truth|, per spin
    order_parameter = 0.05                       # optional: largest allowed |processor - truth| of q2
    level = 0.95                                 # confidence of the verdict

    [[instance]]                                 # as many as you like
    name = "ladder"
    lattice = { kind = "ladder", n = 6, periodic = true }   # any function of `anneal_ref.lattices`; dead = [3, 7] takes sites away
    couplings = { law = "plus_minus" }           # plus_minus | gaussian, sigma | uniform, low, high | levels, k, zero | constant, value | [numbers]
    fields = { law = "gaussian", sigma = 0.1 }   # optional
    seed = 11
    index = 0

    [[instance]]
    name = "measured graph"
    file = "graph.json"                          # written by `Instance.write`

    durations = [2.0, 5.0]                       # at the top of the file: every instance at every duration (ns) ...
    [samples]
    files = "samples/{instance}_{duration}ns_*.csv"   # ... with all files that match, or a list of such patterns
    readout = "01"                               # "pm" for +1 and -1, "01" for 0 (up) and 1 (down); default: what the file says

    [[case]]                                     # instead of `durations` and `samples.files`: case by case
    instance = "ladder"
    duration = 2.0
    samples = ["a.csv", "b.csv"]

Everything is checked before any work starts: unknown keys, values, missing files, NaN and infinity.
"""

from __future__ import annotations

import hashlib
import inspect
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from anneal_ref.base.errors import AnnealRefError, StudyError
from anneal_ref.model import disorder, lattices
from anneal_ref.model.anneal import Anneal
from anneal_ref.model.instances import Instance, draw_instance
from anneal_ref.model.schedules import Schedule
from anneal_ref.observe.samples import Samples
from anneal_ref.studies.schema import InstanceTable, LawTable, ScheduleTable, StudyTable, read_table

LATTICES = (
    "biclique", "chain", "complete", "cubic", "diamond", "honeycomb", "ladder", "random_regular", "square", "triangular",
)  # fmt: skip


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
    readout : str, optional
        "pm" or "01"; by default what each file says.
    """

    name: str
    anneal: Anneal
    files: tuple[Path, ...]
    readout: str | None = None

    def samples(self) -> Samples:
        """Read the files and check that they belong to this instance and duration.

        Raises
        ------
        InputError
            A file that is malformed, or that says it belongs to another instance or duration.
        """
        return Samples.concatenate([Samples.read(file, readout=self.readout).for_instance(self.anneal.instance) for file in self.files])


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
        The tables `truth` and `acceptance` as written, defaults filled in.

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

    @classmethod
    def read(cls, path: str | Path) -> Study:
        """Read and check a study file.

        Raises
        ------
        StudyError
            Anything that is not allowed, with file, key, value, what is allowed and the nearest known key; a missing file.
        """
        path = Path(path)
        table = read_table(path)
        schedule = _schedule(table.schedule, path)
        instances = {one.name: _instance(one, k, path) for k, one in enumerate(table.instance)}
        cases = []
        for name, duration, patterns, where in _pairs(table, path):
            if name not in instances:
                known = ", ".join(f"'{one}'" for one in instances)
                raise StudyError(f"{path}: `{where}.instance` = '{name}': no such instance; there are {known}{_near(name, instances)}")
            try:
                anneal = Anneal(instances[name], schedule, duration=duration, start=table.truth.start)
            except AnnealRefError as error:
                raise StudyError(f"{path}: instance '{name}' at duration {duration:g}: {error}") from error
            files = _files(patterns, name, duration, path, where)
            cases.append(Case(name, anneal, files, table.samples.readout))
        sha256 = hashlib.sha256(path.read_bytes()).hexdigest()
        return cls(table.name, table.description, path, sha256, schedule, tuple(cases), table)


def _pairs(table: StudyTable, path: Path) -> list[tuple[str, float, list[str], str]]:
    """List (instance, duration, file patterns, key) of every case, in the order of the file."""
    if table.case is not None:
        cases = [(one.instance, float(one.duration), _listed(one.samples), f"case[{k}]") for k, one in enumerate(table.case)]
        for k, one in enumerate(cases):
            if any(one[:2] == other[:2] for other in cases[:k]):
                raise StudyError(f"{path}: `case[{k}]` comes twice: instance '{one[0]}' at duration {one[1]:g}; list all files in one case")
        return cases
    patterns = _listed(table.samples.files or [])
    return [(one.name, float(duration), patterns, "samples") for one in table.instance for duration in table.durations or []]


def _listed(value: str | Sequence[str]) -> list[str]:
    return [value] if isinstance(value, str) else list(value)


def _files(patterns: list[str], name: str, duration: float, path: Path, where: str) -> tuple[Path, ...]:
    found: list[Path] = []
    for pattern in patterns:
        spelled = pattern.replace("{instance}", name).replace("{duration}", f"{duration:g}")
        if "{" in spelled or "}" in spelled:
            raise StudyError(f"{path}: `{where}` = '{pattern}': the fields of a pattern are {{instance}} and {{duration}}")
        wild = any(letter in spelled for letter in "*?[")
        if not wild and not (path.parent / spelled).is_file():
            raise StudyError(f"{path}: `{where}`: there is no samples file {path.parent / spelled}, needed for '{name}' at duration {duration:g}")
        matches = _glob(path.parent, spelled) if wild else [path.parent / spelled]
        if not matches:
            raise StudyError(f"{path}: `{where}`: no samples file matches {path.parent / spelled}, needed for '{name}' at duration {duration:g}")
        found += [match for match in matches if match not in found]
    return tuple(found)


def _glob(folder: Path, pattern: str) -> list[Path]:
    anchor = Path(Path(pattern).anchor)
    root, rest = (anchor, str(Path(pattern).relative_to(anchor))) if Path(pattern).is_absolute() else (folder, pattern)
    # a manifest lies beside its samples and is no samples file itself
    return sorted(match for match in root.glob(rest) if match.is_file() and not match.name.endswith(".manifest.json"))


def _schedule(table: ScheduleTable, path: Path) -> Schedule:
    units = {"unit": table.unit, "prefactor": table.prefactor}
    try:
        if table.file is not None:
            file = path.parent / table.file
            if not file.is_file():
                raise StudyError(f"{path}: `schedule.file`: there is no file {file}")
            return Schedule.read_csv(file, interpolation=table.interpolation, **units)
        if table.s is not None:
            return Schedule.from_table(table.s, table.transverse or [], table.problem or [], interpolation=table.interpolation, **units)
        return Schedule.polynomial(table.transverse_polynomial or [], table.problem_polynomial or [], **units)
    except StudyError:
        raise
    except AnnealRefError as error:
        raise StudyError(f"{path}: `schedule`: {error}") from error


def _instance(table: InstanceTable, k: int, path: Path) -> Instance:
    where = f"instance[{k}]"
    if table.file is not None:
        file = path.parent / table.file
        if not file.is_file():
            raise StudyError(f"{path}: `{where}.file`: there is no file {file}")
        try:
            return Instance.read(file)
        except AnnealRefError as error:
            raise StudyError(f"{path}: `{where}.file`: {error}") from error
    assert table.lattice is not None
    kind, arguments = table.lattice.kind, dict(table.lattice.model_extra or {})
    if kind not in LATTICES:
        raise StudyError(f"{path}: `{where}.lattice.kind` = '{kind}': allowed are {', '.join(LATTICES)}{_near(kind, LATTICES)}")
    lattice = _called(getattr(lattices, kind), arguments, f"{where}.lattice", path)
    try:
        if table.lattice.dead is not None:
            lattice = lattice.diluted(dead=table.lattice.dead)
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}.lattice.dead`: {error}") from error
    couplings = _law(table.couplings, f"{where}.couplings", path)
    fields = _law(table.fields, f"{where}.fields", path)
    try:
        if isinstance(couplings, list) or isinstance(fields, list):
            return _written(lattice, couplings, fields, table, where, path)
        return draw_instance(
            lattice, couplings, fields=fields, seed=table.seed or 0, index=table.index or 0, normalise=table.normalise
        )
    except StudyError:
        raise
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}` ('{table.name}'): {error}") from error


def _written(lattice: Any, couplings: Any, fields: Any, table: InstanceTable, where: str, path: Path) -> Instance:
    """Make an instance whose numbers stand in the file."""
    if not isinstance(couplings, list) or not (fields is None or isinstance(fields, list)):
        raise StudyError(f"{path}: `{where}`: give couplings and fields either both as numbers or both as laws")
    if table.normalise is not None:
        raise StudyError(f"{path}: `{where}.normalise` goes with a law; written couplings are taken as they are")
    return Instance(lattice, couplings, fields=fields)


def _law(given: LawTable | list[float] | None, where: str, path: Path) -> Any:
    if given is None or isinstance(given, list):
        return given
    arguments = {key: value for key, value in given.model_dump().items() if key != "law" and value is not None}
    return _called(getattr(disorder, given.law), arguments, where, path)


def _called(function: Callable[..., Any], arguments: dict[str, Any], where: str, path: Path) -> Any:
    """Call a lattice or law with keys of the file, after a check of their names."""
    parameters = inspect.signature(function).parameters
    for key in arguments:
        if key not in parameters:
            raise StudyError(f"{path}: unknown key `{where}.{key}`; {function.__name__} takes {', '.join(parameters) or 'none'}{_near(key, parameters)}")
    missing = [key for key, one in parameters.items() if one.default is one.empty and key not in arguments]
    if missing:
        raise StudyError(f"{path}: key `{where}.{missing[0]}` is missing; {function.__name__} takes {', '.join(parameters)}")
    try:
        return function(**{key: tuple(value) if isinstance(value, list) else value for key, value in arguments.items()})
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}`: {error}") from error


def _near(word: str, known: Any) -> str:
    near = get_close_matches(word, list(known), n=1)
    return f"; did you mean '{near[0]}'?" if near else ""
