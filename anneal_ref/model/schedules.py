"""`Schedule`: the strengths G(s) and P(s) of the Hamiltonian, piecewise polynomials with exact integrals."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import choice, finite, positive
from anneal_ref.base.errors import InputError
from anneal_ref.base.identity import digest
from anneal_ref.model.piecewise import CLOSEST, Piecewise, broken_line, monotone_cubic, power
from anneal_ref.model.schedule_files import read_table

UNITS = {"rad/ns": 1.0, "GHz": 2 * np.pi, "1": 1.0}
INTERPOLATIONS = {"pchip": monotone_cubic, "linear": broken_line}


@dataclass(frozen=True, slots=True, eq=False)
class Schedule:
    """The two strengths of the Hamiltonian as functions of s from 0 to 1.

        H(s) = -G(s) sum_i w_i X_i + P(s) [ sum_(i,j) J_ij Z_i Z_j + sum_i h_i Z_i ]

    G is `transverse` and never negative, P is `problem`; both are angular frequencies (energy / hbar). Make one with
    `Schedule.from_table`, `.read_csv`, `.polynomial` or `.linear`.

    Parameters
    ----------
    source : mapping
        What the schedule is made of; see `from_dict`.
    transverse_pieces, problem_pieces : Piecewise
    unit : {"rad/ns", "1"}
        Unit of both strengths; with "rad/ns" durations are in ns, with "1" they are in units of the inverse strength.

    Examples
    --------
    >>> schedule = Schedule.linear(transverse=(20.0, 0.0), problem=(0.0, 10.0))
    >>> schedule.transverse([0.0, 0.5, 1.0]).tolist()
    [20.0, 10.0, 0.0]
    >>> float(schedule.problem_integral(0.0, 1.0))
    5.0
    """

    source: Mapping[str, Any]
    transverse_pieces: Piecewise
    problem_pieces: Piecewise
    unit: str

    @classmethod
    def from_table(
        cls,
        s: ArrayLike,
        transverse: ArrayLike,
        problem: ArrayLike,
        unit: str = "rad/ns",
        prefactor: float = 1.0,
        interpolation: str = "pchip",
    ) -> Schedule:
        """Make a schedule from a table.

        Parameters
        ----------
        s : array_like, shape (n,)
            Ascending from exactly 0 to exactly 1, at least 2 points.
        transverse, problem : array_like, shape (n,)
            Strengths at these points; `transverse` at least 0.
        unit : {"rad/ns", "GHz", "1"}
            Unit of the table. "rad/ns": energy / hbar. "GHz": energy / h, multiplied by 2 pi. "1": dimensionless.
        prefactor : float
            Multiplies both columns: 0.5 if the table belongs to a Hamiltonian written with G/2 and P/2.
        interpolation : {"pchip", "linear"}
            Monotone cubic, which neither overshoots nor turns negative, or straight lines.

        Raises
        ------
        InputError
            Columns of different lengths, NaN, s unsorted or repeated, or not from 0 to 1, negative `transverse`.

        Examples
        --------
        >>> table = Schedule.from_table([0, 0.4, 1], [6.4, 1.2, 0], [0, 2.0, 9.6], unit="GHz", prefactor=0.5)
        >>> table.problem(1.0).round(3)
        np.float64(30.159)
        """
        points = finite("s", s, (None,))
        columns = {
            "transverse": finite("transverse", transverse, (None,)),
            "problem": finite("problem", problem, (None,)),
        }
        for name, column in columns.items():
            if len(column) != len(points):
                raise InputError(
                    f"s, transverse and problem must have the same length; got {len(points)} values of s and "
                    f"{len(column)} of {name}"
                )
        _check_grid(points)
        negative = np.flatnonzero(columns["transverse"] < 0)
        if negative.size:
            k = int(negative[0])
            raise InputError(
                f"transverse must not be negative; got {columns['transverse'][k]} at s = {points[k]}; "
                "its sign is part of the Hamiltonian's -G sum X"
            )
        return cls._made(
            {
                "kind": "table",
                "s": points,
                **columns,
                "interpolation": choice("interpolation", interpolation, INTERPOLATIONS),
            },
            unit,
            prefactor,
        )

    @classmethod
    def read_csv(
        cls,
        path: str | os.PathLike[str],
        unit: str | None = None,
        prefactor: float | None = None,
        interpolation: str = "pchip",
    ) -> Schedule:
        """Read a table from a CSV file.

        Its first line names the columns `s`, `transverse` and `problem`, in any order. Lines that begin with # are
        comments; `# unit: GHz` and `# prefactor: 0.5` before the first row are heeded.

        Parameters
        ----------
        path : path
        unit : {"rad/ns", "GHz", "1"}, optional
            Unit of the columns; by default what the file says, else "rad/ns".
        prefactor : float, optional
            By default what the file says, else 1.
        interpolation : {"pchip", "linear"}
            See `from_table`.

        Raises
        ------
        InputError
            Names the file and, where there is one, the line. Also if the caller contradicts the file.
        """
        table = read_table(path, unit, prefactor)
        try:
            return cls.from_table(
                *table.columns, unit=table.unit, prefactor=table.prefactor, interpolation=interpolation
            )
        except InputError as error:
            raise InputError(f"{os.fspath(path)}: {error}") from error

    @classmethod
    def polynomial(
        cls, transverse: ArrayLike, problem: ArrayLike, unit: str = "rad/ns", prefactor: float = 1.0
    ) -> Schedule:
        """Make a schedule of two polynomials, c[0] + c[1] s + c[2] s^2 + ...

        Parameters
        ----------
        transverse, problem : array_like, shape (any,)
            Coefficients, the constant first; at most 31 of them. `transverse` must not be negative for s in [0, 1].
        unit, prefactor
            As in `from_table`.

        Examples
        --------
        >>> Schedule.polynomial(transverse=[8, -16, 8], problem=[0, 0, 5]).transverse(0.5)
        array(2.)
        """
        rows = {"transverse": finite("transverse", transverse, (None,)), "problem": finite("problem", problem, (None,))}
        for name, row in rows.items():
            if not 1 <= len(row) <= 31:
                raise InputError(f"{name} must have from 1 to 31 coefficients; got {len(row)}; use a table beyond")
        return cls._made({"kind": "polynomial", **rows}, unit, prefactor)

    @classmethod
    def linear(
        cls,
        transverse: ArrayLike = (1.0, 0.0),
        problem: ArrayLike = (0.0, 1.0),
        unit: str = "rad/ns",
        prefactor: float = 1.0,
    ) -> Schedule:
        """Make a schedule of two straight lines.

        Parameters
        ----------
        transverse, problem : pair of float
            Values at s = 0 and at s = 1; `transverse` at least 0, `problem` of any sign.
        unit, prefactor
            As in `from_table`.
        """
        ends = finite("transverse", transverse, (2,)), finite("problem", problem, (2,))
        return cls.from_table([0.0, 1.0], *ends, unit=unit, prefactor=prefactor, interpolation="linear")

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Schedule:
        """Make a schedule again from its `canonical_dict`."""
        rest = dict(content)
        kind = choice("kind", rest.pop("kind", None), ("table", "polynomial"))
        try:
            return cls.from_table(**rest) if kind == "table" else cls.polynomial(**rest)
        except TypeError as error:
            raise InputError(f"a schedule's content does not fit: {error}") from error

    @classmethod
    def _made(cls, content: Mapping[str, Any], unit: str, prefactor: float) -> Schedule:
        """Bring the strengths to their unit and build the pieces."""
        unit = choice("unit", unit, UNITS)
        factor = UNITS[unit] * positive("prefactor", prefactor)
        with np.errstate(over="ignore"):
            strengths = {name: finite(name, content[name] * factor + 0.0) for name in ("transverse", "problem")}
        source = {**content, **strengths, "unit": "1" if unit == "1" else "rad/ns"}
        if content["kind"] == "table":
            interpolate = INTERPOLATIONS[content["interpolation"]]
            transverse, problem = (interpolate(content["s"], strengths[name]) for name in strengths)
        else:
            transverse, problem = (power(strengths[name]) for name in strengths)
        where, least = transverse.minimum()
        if least < -1e-13 * np.abs(transverse.controls).max():
            raise InputError(
                f"transverse must not be negative between s = 0 and 1; it is {least:.6g} at s = {where:.4g}"
            )
        return cls(source, transverse, problem, source["unit"])

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle the source alone."""
        return Schedule.from_dict, (self.canonical_dict(),)

    def transverse(self, s: ArrayLike) -> NDArray[np.float64]:
        """G at s, any shape."""
        return self.transverse_pieces(s)

    def problem(self, s: ArrayLike) -> NDArray[np.float64]:
        """P at s, any shape."""
        return self.problem_pieces(s)

    def transverse_integral(self, s0: ArrayLike, s1: ArrayLike) -> NDArray[np.float64]:
        """Exact integral of G over s from s0 to s1, shapes that broadcast; negative if s1 < s0."""
        return self.transverse_pieces.integral(s0, s1)

    def problem_integral(self, s0: ArrayLike, s1: ArrayLike) -> NDArray[np.float64]:
        """Exact integral of P over s from s0 to s1, shapes that broadcast."""
        return self.problem_pieces.integral(s0, s1)

    @property
    def knots(self) -> NDArray[np.float64]:
        """Points between which both strengths are polynomials, from 0 to 1."""
        return self.transverse_pieces.breaks

    @property
    def identity(self) -> str:
        """SHA-256 of the content."""
        return digest({"schedule": 1, **self.canonical_dict()})

    def canonical_dict(self) -> dict[str, Any]:
        """Return the content as plain data (in `unit`), from which `from_dict` makes the schedule again."""
        return {key: value.tolist() if isinstance(value, np.ndarray) else value for key, value in self.source.items()}

    def describe(self) -> dict[str, str]:
        """Return a row for a table: form, unit, strengths at both ends."""
        ends = {
            name: " to ".join(f"{value:.4g}" for value in strength([0.0, 1.0]).tolist())
            for name, strength in (("transverse", self.transverse), ("problem", self.problem))
        }
        form = str(self.source.get("interpolation", "polynomial"))
        if "s" in self.source:
            form += f" through {len(self.knots)} points"
        return {"schedule": form, "unit": self.unit, **ends}

    def __repr__(self) -> str:
        """Return form and ends in angle brackets."""
        row = self.describe()
        unit = "" if self.unit == "1" else f" {self.unit}"
        return f"<Schedule {row['schedule']}: transverse {row['transverse']}{unit}, problem {row['problem']}{unit}>"


def _check_grid(s: NDArray[np.float64]) -> None:
    if len(s) < 2:
        raise InputError(f"s must have at least 2 points, 0 and 1; got {len(s)}")
    steps = np.diff(s)
    if (steps <= 0).any():
        k = int(np.flatnonzero(steps <= 0)[0])
        what = "a repeated" if steps[k] == 0 else "an unsorted"
        raise InputError(f"s must ascend strictly; got {what} value: s[{k}] = {s[k]}, s[{k + 1}] = {s[k + 1]}")
    if steps.min() < CLOSEST:
        k = int(np.argmin(steps))
        raise InputError(
            f"points of s must be at least {CLOSEST:g} apart; got s[{k}] = {s[k]}, s[{k + 1}] = {s[k + 1]}; "
            "a jump needs a short ramp instead"
        )
    if s[0] != 0 or s[-1] != 1:
        raise InputError(f"s must run from exactly 0 to exactly 1; got {s[0]} to {s[-1]}; extend or rescale the table")
