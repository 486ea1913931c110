"""The ground state of H(0), as the start of an anneal.

With every transverse weight above zero the off-diagonal elements of H(0) have one sign and connect all configurations,
so the ground state is unique and positive (Perron and Frobenius), and even under the global spin flip when there are no
fields. With G(0) = 0 the problem part alone decides: its ground state must be unique, or unique up to the global flip;
then the even superposition is taken, which is the limit of G(0) -> 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.linalg import ArpackNoConvergence, LinearOperator, eigsh

from anneal_ref.backends.exact.energies import energy_blocks
from anneal_ref.backends.memory import require_memory
from anneal_ref.base.errors import NotConverged, NotSupported
from anneal_ref.model.anneal import Anneal

_DENSE_STATES = 64
_KRYLOV = 24
# bound on the angle between the computed and the true ground state
_ANGLE = 1e-10
_DEGENERATE = (
    "the two lowest states of H(0) are nearly degenerate, as two configurations that differ by the global flip are "
    "where weak fields alone tell them apart; use start='plus', a schedule with a larger G(0), no fields at all (the "
    "even state is taken then), or fields that are strong enough to choose"
)


@dataclass(frozen=True, slots=True, eq=False)
class GroundStart:
    """A ground state and how well it is known.

    Parameters
    ----------
    amplitudes : ndarray, shape (2^N,)
        Real, normalised.
    energy : float
        Ground energy of H(0), in the unit of the schedule.
    residual : float
        Norm of (H - energy) applied to the state, in the same unit.
    angle : float
        Bound on the angle to the true ground state: residual over gap.
    """

    amplitudes: NDArray[np.float64]
    energy: float
    residual: float
    angle: float


def ground_start_bytes(n_sites: int, symmetric: bool) -> int:
    """Bytes at the peak of `ground_start`."""
    return 8 * (_KRYLOV + 8) * (1 << (n_sites - symmetric)) + 32 * (1 << n_sites)


def ground_start(anneal: Anneal) -> GroundStart:
    """Return the ground state of H(0).

    Raises
    ------
    NotSupported
        The ground state is degenerate beyond the global spin flip.
    NotConverged
        Lanczos did not reach the accuracy; the state that it found is inside.
    TooLarge
        The Krylov vectors do not fit into memory.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(1.0, 1.0))
    >>> ground_start(ar.Anneal(instance, schedule, 1.0, start="ground")).energy
    -10.2516617910
    """
    instance = anneal.instance
    symmetric = not instance.has_fields
    require_memory(ground_start_bytes(instance.n_sites, symmetric), f"the ground state of {instance.n_sites} spins")
    transverse, problem = float(anneal.transverse(0.0)), float(anneal.problem(0.0))
    weights = transverse * np.asarray(instance.transverse)
    energies = problem * np.concatenate([block for _, block in energy_blocks(instance)])
    if not weights.any():
        return _diagonal_ground(energies, symmetric)
    if not weights.all():
        raise NotSupported(
            "start='ground' needs every transverse weight above zero, or G(0) = 0; a spin without a transverse term "
            "at t = 0 leaves the ground state undecided",
            ("start='plus'", "a small transverse weight instead of zero"),
        )
    return _positive_ground(energies, weights, symmetric)


def _diagonal_ground(energies: NDArray[np.float64], symmetric: bool) -> GroundStart:
    lowest, scale = float(energies.min()), float(np.abs(energies).max())
    ground = np.flatnonzero(energies <= lowest + 1e-12 * scale)
    if len(ground) > 1 + symmetric:
        raise NotSupported(
            f"the ground state of H(0) is {len(ground)}-fold degenerate with G(0) = 0; start='ground' allows "
            f"{1 + symmetric} without a transverse field",
            ("start='plus'", "a schedule with G(0) > 0"),
        )
    amplitudes = np.zeros(len(energies))
    amplitudes[ground] = len(ground) ** -0.5
    return GroundStart(amplitudes, lowest, 0.0, 0.0)


def _positive_ground(energies: NDArray[np.float64], weights: NDArray[np.float64], symmetric: bool) -> GroundStart:
    n = len(weights)
    # even states are stored by their half with Z = +1 on the last site
    inner = n - symmetric
    diagonal = energies[: 1 << inner]
    sites = list(enumerate(weights[:inner]))

    def apply(vector: NDArray[np.float64]) -> NDArray[np.float64]:
        vector = vector.reshape(-1)
        result = diagonal * vector
        for site, weight in sites:
            shape = (-1, 2, 1 << site)
            result.reshape(shape)[:] -= weight * vector.reshape(shape)[:, ::-1]
        if symmetric:
            # the flip of the last site, brought back to the stored half by the global flip
            result -= weights[-1] * vector[::-1]
        return result

    size = len(diagonal)
    if size <= _DENSE_STATES:
        values, vectors = np.linalg.eigh(np.column_stack([apply(column) for column in np.eye(size)]))
    else:
        operator = LinearOperator((size, size), matvec=apply, dtype=np.float64)
        try:
            values, vectors = eigsh(operator, k=2, which="SA", ncv=_KRYLOV, v0=np.full(size, size**-0.5), maxiter=2000)
        except ArpackNoConvergence as error:
            raise NotConverged(
                f"Lanczos for the ground state of H(0) did not converge ({error}); most likely {_DEGENERATE}", error
            ) from error
    order = np.argsort(values)
    vector = vectors[:, order[0]] * np.sign(vectors[:, order[0]].sum())
    vector /= np.linalg.norm(vector)
    applied = apply(vector)
    energy = float(vector @ applied)
    residual = float(np.linalg.norm(applied - energy * vector))
    gap = float(values[order[1]] - energy) if size > 1 else np.inf
    full = np.concatenate([vector, vector[::-1]]) / np.sqrt(2) if symmetric else vector
    found = GroundStart(full, energy, residual, residual / gap if gap > 0 else np.inf)
    if not found.angle <= _ANGLE:
        raise NotConverged(
            f"the ground state of H(0) is known to an angle of {found.angle:.1e} only, {_ANGLE:.0e} is asked for "
            f"(residual {residual:.1e}, gap {gap:.1e}): {_DEGENERATE}",
            found,
        )
    return found
