"""An uncertainty budget as a table: what each input does, which one dominates, and where caution is due."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from anneal_ref.observe.moments import Moments
from anneal_ref.observe.observables import connected, problem_energy, q2
from anneal_ref.truth.effects import InputEffect, Observable

if TYPE_CHECKING:
    from anneal_ref.truth.uncertainty import UncertaintyBudget

ALL, NUMERICAL, TOGETHER = "all inputs", "numerical error", "together, 95 %"

_ROUNDING = 1e-12  # of an entry; changes below it are none
_TOLD = 0.02  # error of an uncertainty, as a part of it, from which it is told


def shares(budget: UncertaintyBudget) -> dict[str, float]:
    """Return the part of the variance of all scored correlations that each input makes; empty where there is none."""
    squares = {
        name: float(effect.uncertainty(_scored(budget), pooled=True)) ** 2 for name, effect in budget.effects.items()
    }
    total = sum(squares.values())
    return {name: square / total for name, square in squares.items()} if total > _ROUNDING**2 else {}


def table(budget: UncertaintyBudget) -> dict[str, dict[str, float]]:
    """Return the rows of a budget; see `UncertaintyBudget.table`."""

    def of(effect: InputEffect) -> Callable[[Observable], NDArray[np.float64]]:
        return lambda f: effect.uncertainty(f).value

    rows = {name: _row(budget, of(effect)) for name, effect in budget.effects.items()}
    rows[ALL] = _row(budget, lambda f: budget.estimate(f).stat)
    rows[NUMERICAL] = _row(budget, lambda f: budget.estimate(f).num)
    rows[TOGETHER] = _row(budget, lambda f: budget.estimate(f).half_width(0.95))
    if all(row["largest Z"] < _ROUNDING for row in rows.values()):
        for row in rows.values():
            del row["largest Z"]
    return rows


def notes(budget: UncertaintyBudget) -> tuple[str, ...]:
    """Return where a straight line, the back-end or the reference is not good enough."""
    found = [] if budget.truth.outcome == "converged" else [f"the outcome of the reference is {budget.truth.outcome!r}"]
    blocks: dict[str, Observable] = {"<Z>": lambda moments: moments.z.value, "<ZZ>": _pairs}
    for name, effect in budget.effects.items():
        for block, f in blocks.items():
            error = effect.weight * np.maximum(budget.run_error(f), _ROUNDING)
            floor = float(np.linalg.norm(error))
            size = float(effect.uncertainty(f, pooled=True))
            if not effect.is_straight(f, floor):
                found.append(
                    f"{name}: {block} does not change in a straight line, so that its change is not normal and has a "
                    "mean; the uncertainty is the root mean square of first and second order"
                )
            elif _ROUNDING * error.size**0.5 < size < floor:
                found.append(
                    f"{name}: the change of {block} is below the numerical error of its runs; give a finer back-end, "
                    "such as truth.finest, if it matters"
                )
    return tuple(found)


def text(budget: UncertaintyBudget) -> str:
    """Return the table to be read."""
    rows = table(budget)
    columns = list(rows[ALL])
    anneal = budget.truth.anneal
    lines = [
        f"uncertainty of {anneal.n_sites} spins, duration {anneal.duration:g} {anneal.time_unit}".rstrip()
        + f", from {budget.n_runs} runs",
        f"  back-end {budget.backend}",
        f"  {'input':<17}{'stated':>15}" + "".join(f"{name:>12}" for name in columns) + "  method",
    ]
    for name, row in rows.items():
        effect = budget.effects.get(name)
        stated, method = ("", "") if effect is None else (effect.stated, _method(effect, _scored(budget)))
        numbers = "".join(f"{row[column]:>12.2g}" for column in columns)
        lines.append(f"  {name:<17}{stated:>15}{numbers}  {method}".rstrip())
    return "\n".join((*lines, f"  {_verdict(budget, rows)}", *(f"  note: {note}" for note in notes(budget))))


def _verdict(budget: UncertaintyBudget, rows: dict[str, dict[str, float]]) -> str:
    parts = shares(budget)
    if not parts:
        return "nothing that is uncertain changes the correlations"
    dominant = max(parts, key=lambda name: parts[name])
    verdict = f"{dominant} makes {parts[dominant]:.0%} of the variance of the correlations"
    if rows[NUMERICAL]["rms ZZ"] > rows[ALL]["rms ZZ"]:
        return f"the numerical error is larger than what all inputs make together; {verdict}"
    return verdict


def _row(budget: UncertaintyBudget, width: Callable[[Observable], NDArray[np.float64]]) -> dict[str, float]:
    instance, scored = budget.truth.anneal.instance, _scored(budget)
    row = {}
    if instance.n_sites > 1:
        pairs = width(_pairs)
        row["largest ZZ"], row["rms ZZ"] = float(pairs.max()), float(np.sqrt(np.mean(pairs**2)))
        norm = float(np.linalg.norm(scored(budget.truth.moments())))
        if norm > _ROUNDING:
            row["eps"] = float(np.linalg.norm(width(scored))) / norm
        row["q2"] = float(width(q2))
    row["energy"] = float(width(lambda moments: problem_energy(moments, instance)))
    row["largest Z"] = float(width(lambda moments: moments.z.value).max())
    return row


def _method(effect: InputEffect, f: Observable) -> str:
    found = effect.uncertainty(f, pooled=True)
    if found.stat <= _TOLD * found.value:
        return effect.method
    return f"{effect.method}, ± {float(found.stat / found.value):.0%}"


def _scored(budget: UncertaintyBudget) -> Callable[[Moments], NDArray[np.float64]]:
    """Return the correlations that a comparison scores: connected ones where there are fields."""
    if not budget.truth.anneal.instance.has_fields:
        return _pairs
    return lambda moments: connected(moments)[np.triu_indices(moments.n_sites, 1)]


def _pairs(moments: Moments) -> NDArray[np.float64]:
    return np.asarray(moments.zz.value[np.triu_indices(moments.n_sites, 1)])
