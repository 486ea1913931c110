"""The table of a convergence study."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from anneal_ref.backends.memory import readable_bytes
from anneal_ref.observe.observables import problem_energy, q2

if TYPE_CHECKING:
    from anneal_ref.truth.convergence import Convergence


def convergence_text(convergence: Convergence) -> str:
    """Return a row for each run, and below what the ladder tells about its end."""
    anneal, rungs = convergence.anneal, convergence.rungs
    own = convergence.reference is None
    columns = [convergence.error(name) for name in ("correlation_error", "largest", "energy", "q2")]
    resolved = convergence.resolved()
    lines = [
        f"convergence for {anneal.n_sites} spins, duration {anneal.duration:g}: "
        f"{'settled' if convergence.settled else 'not settled'}",
        f"  errors against {'the last run' if own else 'the reference'}:",
        f"  {'bond':>6}{'step':>7}{'correlation':>14}{'largest':>9}{'energy/N':>10}{'q2':>9}{'discarded':>11}"
        f"{'used':>6}{'seconds':>9}{'memory':>11}",
    ]
    for k, rung in enumerate(rungs):
        step = "1" if rung.halvings == 0 else f"1/{2**rung.halvings}"
        row = f"  {rung.bond_dimension:>6}{step:>7}"
        if own and rung is convergence.best:
            row += f"{'-':>14}{'-':>9}{'-':>10}{'-':>9}"
        else:
            eps, largest, energy, order = (f"{column[k]:.1e}" for column in columns)
            row += f"{eps + (' ' if resolved[k] else '~'):>14}{largest:>9}{energy:>10}{order:>9}"
        bond = str(rung.ledger.get("largest_bond", "-"))
        row += f"{rung.discarded_weight:>11.0e}{bond:>6}{rung.seconds:>9.2g}{readable_bytes(rung.bytes):>11}"
        lines.append(row)
    floor = convergence.floor()
    if not resolved[: len(rungs) - own].all():
        what = "last run" if own else "reference"
        lines.append(f"  ~ less than twice the error of the {what} itself, {floor:.1e}: not told apart from it")
    bond_error, step_error = convergence.own_error()
    lines.append(
        f"  correlation error of the last run: {_known(bond_error, 'bond dimension', 'three bond dimensions')}, "
        f"{_known(step_error, 'step', 'two steps')}"
    )
    law = convergence.law
    if law is not None:
        weight = "" if math.isnan(law.by_weight) else f", {law.by_weight:.2g} by the discarded weights"
        lines.append(
            f"  error falls as (bond dimension)^-{law.exponent:.2g}; left of the last change: {law.by_dimension:.2g} "
            f"by this law{weight}" + ("" if law.settled else ": not settled, take larger bond dimensions")
        )
    energy_estimate = convergence.estimate(lambda moments: problem_energy(moments, anneal.instance) / anneal.n_sites)
    lines.append(f"  at infinite bond dimension: energy per spin {energy_estimate}; q2 {convergence.estimate(q2)}")
    return "\n".join(lines)


def _known(error: float, source: str, needed: str) -> str:
    return f"{source} not measured (takes {needed})" if math.isnan(error) else f"{error:.1e} from the {source}"
