"""From the tables of a study file to schedules and instances; every message names the file and the key."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.contract import Backend
from anneal_ref.base.errors import AnnealRefError, InputError, StudyError
from anneal_ref.model import disorder, lattices
from anneal_ref.model.instances import Instance, draw_instance
from anneal_ref.model.lattice import Lattice
from anneal_ref.model.schedules import Schedule
from anneal_ref.studies.records import BACKENDS
from anneal_ref.studies.schema import BackendTable, InstanceTable, LatticeTable, LawTable, ScheduleTable

LATTICES = (
    "biclique", "chain", "complete", "cubic", "diamond", "honeycomb", "ladder", "random_regular", "square",
    "triangular",
)  # fmt: skip


def make_schedule(table: ScheduleTable, path: Path) -> Schedule:
    """Return the schedule of a study file, or raise `StudyError`."""
    try:
        if table.file is not None:
            file = path.parent / table.file
            if not file.is_file():
                raise StudyError(f"{path}: `schedule.file`: there is no file {file}")
            return Schedule.read_csv(file, table.unit, table.prefactor, interpolation=table.interpolation)
        unit, prefactor = table.unit or "rad/ns", table.prefactor or 1.0
        if table.s is not None:
            points = (table.s, table.transverse or [], table.problem or [])
            return Schedule.from_table(*points, unit=unit, prefactor=prefactor, interpolation=table.interpolation)
        return Schedule.polynomial(table.transverse_polynomial or [], table.problem_polynomial or [], unit, prefactor)
    except StudyError:
        raise
    except AnnealRefError as error:
        raise StudyError(f"{path}: `schedule`: {error}") from error


def make_instance(table: InstanceTable, k: int, path: Path) -> Instance:
    """Return the k-th instance of a study file, or raise `StudyError`."""
    where = f"instance[{k}]"
    if table.file is not None:
        file = path.parent / table.file
        if not file.is_file():
            raise StudyError(f"{path}: `{where}.file`: there is no file {file}")
        try:
            return Instance.read(file)
        except AnnealRefError as error:
            raise StudyError(f"{path}: `{where}.file`: {error}") from error
    lattice = _lattice(table.lattice, f"{where}.lattice", path)
    couplings = _law(table.couplings, f"{where}.couplings", path)
    fields = _law(table.fields, f"{where}.fields", path)
    transverse = _law(table.transverse, f"{where}.transverse", path)
    try:
        return draw_instance(
            lattice,
            couplings,
            fields,
            transverse,
            seed=table.seed or 0,
            index=table.index or 0,
            normalise=table.normalise,
        )
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}` ('{table.name}'): {error}") from error


def make_backend(table: BackendTable | None, path: Path) -> Backend | None:
    """Return the back-end that a study file asks for, None if it leaves the choice, or raise `StudyError`."""
    if table is None:
        return None
    if table.kind not in BACKENDS:
        raise StudyError(
            f"{path}: `truth.backend.kind` must be one of {', '.join(BACKENDS)}; got '{table.kind}'"
            f"{nearest(table.kind, BACKENDS)}"
        )
    made: Backend = _called(BACKENDS[table.kind], dict(table.model_extra or {}), "truth.backend", path)
    return made


def _lattice(table: LatticeTable | None, where: str, path: Path) -> Lattice:
    kind = table.kind if table is not None else ""
    if table is None or kind not in LATTICES:
        raise StudyError(
            f"{path}: `{where}.kind` must be one of {', '.join(LATTICES)}; got '{kind}'{nearest(kind, LATTICES)}"
        )
    lattice: Lattice = _called(getattr(lattices, kind), dict(table.model_extra or {}), where, path)
    try:
        return lattice if table.dead is None else lattice.diluted(dead=table.dead)
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}.dead`: {error}") from error


@dataclass(frozen=True, slots=True)
class _Written:
    """A law that draws the numbers that stand in the file."""

    numbers: tuple[float, ...]
    where: str

    def draw(self, n: int, seed: int, index: int, stream: str) -> NDArray[np.float64]:
        if len(self.numbers) != n:
            raise InputError(f"`{self.where}` must hold {n} numbers for this lattice; got {len(self.numbers)}")
        return np.array(self.numbers, dtype=np.float64)


def _law(given: LawTable | list[float] | None, where: str, path: Path) -> Any:
    if given is None:
        return None
    if isinstance(given, list):
        return _Written(tuple(given), where)
    arguments = {key: value for key, value in given.model_dump().items() if key != "law" and value is not None}
    return _called(getattr(disorder, given.law), arguments, where, path)


def _called(function: Callable[..., Any], arguments: dict[str, Any], where: str, path: Path) -> Any:
    """Call a lattice or law with keys of the file, after a check of their names."""
    parameters = inspect.signature(function).parameters
    for key in arguments:
        if key not in parameters:
            raise StudyError(
                f"{path}: unknown key `{where}.{key}`; {function.__name__} takes "
                f"{', '.join(parameters) or 'none'}{nearest(key, parameters)}"
            )
    missing = [key for key, one in parameters.items() if one.default is one.empty and key not in arguments]
    if missing:
        raise StudyError(
            f"{path}: key `{where}.{missing[0]}` is missing; {function.__name__} takes {', '.join(parameters)}"
        )
    try:
        return function(**{key: tuple(value) if isinstance(value, list) else value for key, value in arguments.items()})
    except AnnealRefError as error:
        raise StudyError(f"{path}: `{where}`: {error}") from error


def nearest(word: str, known: Iterable[str]) -> str:
    """Return the end of a message that names the nearest known word, if one is near."""
    near = get_close_matches(word, list(known), n=1)
    return f"; did you mean '{near[0]}'?" if near else ""
