"""What a study file may say: the tables of the TOML file, checked by pydantic, with errors that a person can act on.

`Study` (in `study.py`) turns these tables into anneals and samples files and documents the format.
"""

from __future__ import annotations

import difflib
import tomllib
import types
import typing
from pathlib import Path
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from anneal_ref.base.errors import StudyError, in_words

FORMAT = 1


class Table(BaseModel):
    """A TOML table: no unknown keys, no silent conversions, no NaN, no infinity."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


class ScheduleTable(Table):
    """`[schedule]`: a CSV file, a table of points, or polynomials in s."""

    file: str | None = None
    s: list[float] | None = None
    transverse: list[float] | None = None
    problem: list[float] | None = None
    transverse_polynomial: list[float] | None = None
    problem_polynomial: list[float] | None = None
    unit: Literal["rad/ns", "GHz", "1"] | None = None
    prefactor: float | None = Field(default=None, gt=0)
    interpolation: Literal["pchip", "linear"] = "pchip"

    @model_validator(mode="after")
    def _one_form(self) -> ScheduleTable:
        forms: dict[str, list[object]] = {
            "`file`": [self.file],
            "`s`, `transverse` and `problem`": [self.s, self.transverse, self.problem],
            "`transverse_polynomial` and `problem_polynomial`": [self.transverse_polynomial, self.problem_polynomial],
        }
        begun = [name for name, keys in forms.items() if any(key is not None for key in keys)]
        if len(begun) != 1:
            given = " and ".join(begun) or "none of them"
            raise ValueError(f"give exactly one of {', or '.join(forms)}; got {given}")
        if any(key is None for key in forms[begun[0]]):
            raise ValueError(f"{begun[0]} belong together; one is missing")
        return self


class WaveformTable(Table):
    """`[waveform]`: s against the fraction u of the duration, a broken line."""

    u: list[float]
    s: list[float]


class BackendTable(Table):
    """`truth.backend`: a back-end by name, and the settings of its coarsest run."""

    model_config = ConfigDict(extra="allow", frozen=True, strict=True, allow_inf_nan=False)

    kind: str


class TruthTable(Table):
    """`[truth]`: how well the Schrodinger equation is solved."""

    tolerance: float = Field(default=1e-3, gt=0, lt=1)
    samples: int = Field(default=16384, ge=1)
    seed: int = Field(default=0, ge=0)
    start: Literal["plus", "ground"] = "plus"
    budget: float = Field(default=3600.0, gt=0)
    backend: BackendTable | None = None


class AcceptanceTable(Table):
    """`[acceptance]`: the limits that the processor must meet."""

    correlation_error: float = Field(gt=0)
    magnetisation_error: float | None = Field(default=None, gt=0)
    residual_energy: float | None = Field(default=None, gt=0)
    order_parameter: float | None = Field(default=None, gt=0)
    level: float = Field(default=0.95, gt=0.5, lt=1)


class LatticeTable(Table):
    """`lattice`: a kind and the arguments of its function, and dead sites if any."""

    model_config = ConfigDict(extra="allow", frozen=True, strict=True, allow_inf_nan=False)

    kind: str
    dead: list[int] | None = None


class LawTable(Table):
    """A disorder law by name and its parameters."""

    law: Literal["plus_minus", "gaussian", "uniform", "levels", "constant"]
    sigma: float | None = Field(default=None, gt=0)
    low: float | None = None
    high: float | None = None
    k: int | None = Field(default=None, ge=1)
    zero: bool | None = None
    value: float | None = None


class InstanceTable(Table):
    """`[[instance]]`: a lattice with seeded disorder, or a file."""

    name: str = Field(min_length=1, pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]*$")
    file: str | None = None
    lattice: LatticeTable | None = None
    couplings: LawTable | list[float] | None = None
    fields: LawTable | list[float] | None = None
    transverse: LawTable | list[float] | None = None
    seed: int | None = Field(default=None, ge=0)
    index: int | None = Field(default=None, ge=0)
    normalise: str | None = None

    @model_validator(mode="after")
    def _one_form(self) -> InstanceTable:
        drawn: dict[str, object] = {"lattice": self.lattice, "couplings": self.couplings, "fields": self.fields}
        drawn |= {"transverse": self.transverse, "seed": self.seed, "index": self.index, "normalise": self.normalise}
        given = [key for key, value in drawn.items() if value is not None]
        if self.file is not None and given:
            raise ValueError(f"`file` holds the whole instance; take away {', '.join(f'`{key}`' for key in given)}")
        if self.file is None and (self.lattice is None or self.couplings is None):
            raise ValueError("give either `file`, or `lattice` and `couplings`")
        random = [
            law
            for law in (self.couplings, self.fields, self.transverse)
            if isinstance(law, LawTable) and law.law != "constant"
        ]
        if random and self.seed is None:
            raise ValueError("drawn numbers need a `seed`, a whole number of at least 0")
        return self


class SamplesTable(Table):
    """`[samples]`: how the files of spins are read, and where those of the product lie."""

    files: str | list[str] | None = None
    values: Literal["spins", "bits"] | None = None


class CaseTable(Table):
    """`[[case]]`: one instance, one duration, its samples files."""

    instance: str
    duration: float = Field(gt=0)
    samples: str | list[str] | None = None


class StudyTable(Table):
    """The whole file."""

    format: Literal[1]
    name: str = Field(min_length=1)
    description: str = ""
    schedule: ScheduleTable
    waveform: WaveformTable | None = None
    truth: TruthTable = TruthTable()
    acceptance: AcceptanceTable
    instance: list[InstanceTable] = Field(min_length=1)
    durations: list[float] | None = None
    samples: SamplesTable = SamplesTable()
    case: list[CaseTable] | None = None

    @model_validator(mode="after")
    def _consistent(self) -> StudyTable:
        names = [instance.name for instance in self.instance]
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            raise ValueError(f"each instance needs a name of its own; {', '.join(map(repr, twice))} comes twice")
        product = self.durations is not None or self.samples.files is not None
        if product == (self.case is not None):
            raise ValueError(
                "give either `durations` with `samples.files` (every instance at every duration), or `[[case]]` tables"
            )
        if product and not self.durations:
            raise ValueError("`durations` must list at least one duration; `samples.files` are those of its cases")
        if self.durations is not None and (len(set(self.durations)) < len(self.durations) or min(self.durations) <= 0):
            raise ValueError(f"`durations` must be positive and different from each other; got {self.durations}")
        return self


def read_table(path: Path) -> StudyTable:
    """Read and check a study file.

    Raises
    ------
    StudyError
        The file cannot be read, is no TOML, or says something that is not allowed. Every fault is listed at once.
    """
    try:
        text = path.read_bytes().decode("utf-8")
    except FileNotFoundError as error:
        raise StudyError(f"there is no study file {path}; `anneal-ref demo saltmarsh` makes an example") from error
    except (OSError, UnicodeDecodeError) as error:
        raise StudyError(f"the study file {path} cannot be read: {in_words(error)}") from error
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise StudyError(f"{path} is not a TOML file: {error}") from error
    if data.get("format") != FORMAT:
        given = f"got {data['format']!r}" if "format" in data else "there is none"
        raise StudyError(
            f"{path}: `format` must be {FORMAT}, the format of study files that this version reads; {given}"
        )
    try:
        return StudyTable.model_validate(data)
    except ValidationError as error:
        faults = error.errors(include_url=False)
        # a union reports a fault for each alternative: those of the shape that was not meant are noise
        meant = [fault for fault in faults if not _other_shape(fault)]
        sentences = dict.fromkeys(_sentence(fault) for fault in meant)
        raise StudyError("\n".join(f"{path}: {sentence}" for sentence in sentences)) from error


_ALTERNATIVES = {
    "LawTable": (dict, 'a law such as { law = "plus_minus" }, or a list of numbers'),
    "list[float]": (list, 'a law such as { law = "plus_minus" }, or a list of numbers'),
    "str": (str, "a string, or a list of strings"),
    "list[str]": (list, "a string, or a list of strings"),
}


def _other_shape(fault: Any) -> bool:
    last = fault["loc"][-1] if fault["loc"] else None
    if last not in _ALTERNATIVES or fault["type"] not in ("model_type", "list_type", "string_type"):
        return False
    siblings = [shape for shape, words in _ALTERNATIVES.values() if words == _ALTERNATIVES[last][1]]
    return isinstance(fault["input"], tuple(siblings))


def _sentence(fault: Any) -> str:
    path = [part for part in fault["loc"] if part not in _ALTERNATIVES]
    where = _spelled(path)
    if fault["type"] == "extra_forbidden":
        return f"unknown key {where}; {_hint(str(path[-1]), path[:-1])}"
    if fault["type"] == "missing":
        return f"key {where} is missing"
    if fault["type"] == "string_pattern_mismatch":
        allowed = "letters, digits, '_', '.' and '-', beginning with a letter or digit (it goes into file names)"
        return f"{where} must be made of {allowed}; got {_toml(fault['input'])}"
    message = fault["msg"].removeprefix("Value error, ")
    if fault["type"] == "value_error":
        return f"{where}: {message}" if where else message
    value = fault["input"]
    if fault["loc"][-1] in _ALTERNATIVES and len(path) < len(fault["loc"]):
        message = f"must be {_ALTERNATIVES[fault['loc'][-1]][1]}"
    message = message.replace("Input should", "must").replace("must be a valid", "must be a")
    text = f"{where} {message}; got {_toml(value)}"
    allowed = fault.get("ctx", {}).get("expected")
    if allowed and isinstance(value, str):
        near = difflib.get_close_matches(
            value, [word.strip("'") for word in allowed.replace(" or ", ", ").split(", ")], n=1
        )
        text += f"; did you mean '{near[0]}'?" if near else ""
    return text


def _hint(key: str, path: list[Any]) -> str:
    """Say where an unknown key belongs, or which known key is nearest, or which there are."""
    known = _known_keys(path)
    near = difflib.get_close_matches(key, known, n=1)
    if near:
        return f"did you mean `{near[0]}`?"
    if key in StudyTable.model_fields:
        return f"`{key}` belongs at the top of the file, above the first [table]"
    homes = [name for name in StudyTable.model_fields if key in _known_keys([name]) and name != "case"]
    if homes:
        return f"it belongs to `[{homes[0]}]`"
    return f"known keys there: {', '.join(known)}"


def _spelled(path: list[Any]) -> str:
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return f"`{text}`" if text else ""


def _toml(value: Any) -> str:
    text = {True: "true", False: "false"}.get(value, repr(value)) if isinstance(value, bool) else repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _known_keys(path: list[Any]) -> list[str]:
    """Keys that the table at a place may hold."""
    tables: list[type[BaseModel]] = [StudyTable]
    for part in path:
        if isinstance(part, str):
            hints = [typing.get_type_hints(table).get(part) for table in tables]
            tables = [table for hint in hints for table in _tables_in(hint)]
    return [key for table in tables for key in table.model_fields]


def _tables_in(hint: Any) -> list[type[BaseModel]]:
    if isinstance(hint, type) and not isinstance(hint, types.GenericAlias) and issubclass(hint, BaseModel):
        return [hint]
    return [table for part in typing.get_args(hint) for table in _tables_in(part)]
