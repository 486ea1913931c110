"""Observables: plain functions of moments, or of spins, that return plain numbers.

The functions of moments are below; those of spins (`anneal_ref.observe.overlaps`) and the readout correction
(`anneal_ref.observe.readout`) can be had from here too.

Their errors come from whoever owns the data and knows how the entries vary together: `samples.estimate(f)`,
`reference.estimate(f)`. The square of a noisy number is too large on average by its variance. `q2` and `q2_full`
therefore take the square of `stat` away, which is nothing for exact moments and (1 - c^2)/(n - 1) for n shots; for a
function of your own that squares moments `samples.estimate` does the same.

An average over disorder of a function that is not linear in the moments is the average of the function over instances,
not the function of averaged moments.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import finite, number
from anneal_ref.base.errors import InputError
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.overlaps import (
    binder_glass,
    binder_magnet,
    energies,
    energy_distribution,
    energy_histogram,
    glass_ratio,
    magnet_moments,
    overlap_moments,
    products,
)
from anneal_ref.observe.readout import apply_flips, undo_flips

if TYPE_CHECKING:
    from anneal_ref.model.instances import Instance
    from anneal_ref.model.lattices import Lattice

__all__ = [
    "apply_flips", "binder_glass", "binder_magnet", "connected", "energies", "energy_distribution", "energy_histogram",
    "glass_ratio", "kink_density", "magnet_moments", "magnetisation", "magnetisation_squared", "overlap_moments",
    "problem_energy", "products", "q2", "q2_full", "residual_energy", "structure_factor", "undo_flips",
]  # fmt: skip


def problem_energy(moments: Moments, instance: Instance) -> float:
    """Return E = sum_(i,j) J_ij <Z_i Z_j> + sum_i h_i <Z_i>, in units of J."""
    _same_size(moments, instance.n_sites)
    i, j = instance.lattice.edges.T
    return float(instance.couplings @ moments.zz.value[i, j] + instance.fields @ moments.z.value)


def residual_energy(moments: Moments, instance: Instance, ground: Any) -> float:
    """Return (E - E_ground)/N, the residual energy per spin, in units of J.

    Parameters
    ----------
    moments : Moments
    instance : Instance
    ground : GroundEnergy, Estimate or float
        The ground energy of the instance; of an object, its `value`.
    """
    value = number("ground", float(getattr(ground, "value", ground)))
    return (problem_energy(moments, instance) - value) / float(instance.n_sites)


def q2(moments: Moments) -> float:
    """Return the order parameter of a glass, the mean over pairs i < j of <Z_i Z_j>^2, without bias from noise.

    See Also
    --------
    q2_full : includes i = j, as the overlap of two replicas does.

    Examples
    --------
    >>> q2(Moments.of([0, 0], [[1, 0.5], [0.5, 1]])), q2_full(Moments.of([0, 0], [[1, 0.5], [0.5, 1]]))
    (0.25, 0.625)
    """
    n = moments.n_sites
    if n < 2:
        raise InputError(f"a mean over pairs of spins takes at least 2 spins; got {n}")
    return float(np.sum(_squares(moments)[np.triu_indices(n, 1)]) * 2 / (n * (n - 1)))


def q2_full(moments: Moments) -> float:
    """Return sum_ij <Z_i Z_j>^2 / N^2, i = j included: the mean square overlap of two replicas, without noise bias."""
    return float(np.sum(_squares(moments)) / moments.n_sites**2)


def magnetisation(moments: Moments) -> float:
    """Return the mean of <Z_i> over the sites."""
    return float(moments.z.value.mean())


def magnetisation_squared(moments: Moments) -> float:
    """Return <m^2> = sum_ij <Z_i Z_j> / N^2 with m = sum_i Z_i / N; linear in the moments, so without bias."""
    return float(moments.zz.value.mean())


def connected(moments: Moments) -> NDArray[np.float64]:
    """Return <Z_i Z_j> - <Z_i><Z_j>, shape (n_sites, n_sites), with the variances on the diagonal.

    From n shots it is too small by the factor (n - 1)/n, like a sample variance; `samples.estimate(connected)` is not.
    """
    return moments.zz.value - np.outer(moments.z.value, moments.z.value)


def kink_density(moments: Moments, instance: Instance) -> float:
    """Return the fraction of unsatisfied bonds, the mean of (1 + sign(J_ij) <Z_i Z_j>)/2 over bonds with J_ij != 0.

    Raises
    ------
    InputError
        An instance without any coupling.
    """
    _same_size(moments, instance.n_sites)
    bonds = instance.couplings != 0
    if not bonds.any():
        raise InputError("a kink is an unsatisfied bond; the instance has no bond with a coupling other than 0")
    i, j = instance.lattice.edges[bonds].T
    return float(np.mean(1.0 + np.sign(instance.couplings[bonds]) * moments.zz.value[i, j]) / 2.0)


def structure_factor(moments: Moments, lattice: Lattice, wave_vectors: ArrayLike) -> NDArray[np.float64]:
    """Return S(k) = sum_ij cos(k . (r_i - r_j)) <Z_i Z_j> / N.

    Parameters
    ----------
    moments : Moments
    lattice : Lattice
        With coordinates r, shape (n_sites, d).
    wave_vectors : array_like, shape (n_vectors, d) or (d,)
        In radians per unit of the coordinates. On periodic axes take multiples of 2 pi / length.

    Returns
    -------
    ndarray, shape (n_vectors,) or ()

    Raises
    ------
    InputError
        A lattice without coordinates, or wave vectors of another dimension.
    """
    _same_size(moments, lattice.n_sites)
    if lattice.coordinates is None:
        raise InputError(f"a structure factor takes a lattice with coordinates; {lattice.name} has none")
    vectors = finite("wave_vectors", wave_vectors)
    d = lattice.coordinates.shape[1]
    if vectors.ndim not in (1, 2) or vectors.shape[-1] != d:
        allowed = f"({d},) or (any, {d}) on {lattice.name}"
        raise InputError(f"wave_vectors must have shape {allowed}; got shape {vectors.shape}")
    wave = np.exp(1j * vectors @ lattice.coordinates.T)
    return np.asarray(np.einsum("...i,ij,...j->...", wave.conj(), moments.zz.value, wave).real / moments.n_sites)


def _same_size(moments: Moments, n_sites: int) -> None:
    if moments.n_sites != n_sites:
        raise InputError(f"moments of {moments.n_sites} spins do not go with {n_sites} sites")


def _squares(moments: Moments) -> NDArray[np.float64]:
    """Return <Z_i Z_j>^2 without bias: E[c^2] is larger than the square of the mean by the variance of c."""
    return moments.zz.value**2 - moments.zz.stat**2
