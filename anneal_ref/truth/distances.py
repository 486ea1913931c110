"""How far moments are from a target, in the quantities of a convergence study, and what the target leaves open."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.checks import choice
from anneal_ref.base.errors import InputError
from anneal_ref.model.instances import Instance
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.observables import problem_energy, q2

QUANTITIES = ("correlation_error", "largest", "energy", "q2")
"""Relative error of all correlations, largest error of any moment, that of the energy per spin, that of q2."""

Floats = NDArray[np.float64]


def distance(quantity: str, instance: Instance, moments: Moments, target: Moments) -> float:
    """Return the error of moments against a target.

    Parameters
    ----------
    quantity : str
        One of `QUANTITIES`.
    instance : Instance
    moments, target : Moments

    Raises
    ------
    InputError
        Another quantity; a relative error of a target without correlations.

    Examples
    --------
    >>> from anneal_ref import lattices
    >>> pair = Instance(lattices.chain(2), [1.0])
    >>> run, truth = (Moments.of([0, 0], [[1, c], [c, 1]]) for c in (-0.45, -0.5))
    >>> [round(distance(name, pair, run, truth), 4) for name in QUANTITIES]
    [0.1, 0.05, 0.025, 0.0475]
    """
    choice("quantity", quantity, QUANTITIES)
    if quantity == "energy":
        return abs(problem_energy(moments, instance) - problem_energy(target, instance)) / instance.n_sites
    if quantity == "q2":
        return abs(q2(moments) - q2(target))
    if quantity == "largest":
        z, zz = (np.abs(getattr(moments, name).value - getattr(target, name).value).max() for name in ("z", "zz"))
        return float(max(z, zz))
    return float(np.sqrt(squared_error(instance, moments, target) / truth_squares(instance, target)))


def uncertainty(quantity: str, instance: Instance, target: Moments) -> float:
    """Return the bound on the same error that the errors of the target leave open, in the first two quantities.

    As for the squared distance itself, the bounds of all correlations are taken together as the root of their summed
    squares: in the worst case every true correlation lies at its bound.
    """
    choice("quantity", quantity, QUANTITIES[:2])
    if quantity == "largest":
        return float(max(target.z.num.max(), target.zz.num.max()))
    return float(np.sqrt(squared_bound(instance, target) / truth_squares(instance, target)))


def squared_error(instance: Instance, moments: Moments, target: Moments) -> float:
    """Return sum_(i<j) (c - t)^2."""
    return float(np.sum((_scored(instance, moments) - _scored(instance, target)) ** 2))


def truth_squares(instance: Instance, target: Moments) -> float:
    """Return sum_(i<j) t^2, or raise `InputError` if it is 0."""
    squares = float(np.sum(_scored(instance, target) ** 2))
    if squares == 0:
        raise InputError("the truth has no correlations, so that an error relative to them means nothing")
    return squares


def squared_bound(instance: Instance, target: Moments) -> float:
    """Return the sum over i < j of the squared numerical bounds of the scored correlations."""
    num = target.zz.num
    if instance.has_fields:
        cross = np.outer(np.abs(target.z.value), target.z.num)
        num = num + cross + cross.T
    return float(np.sum(num[np.triu_indices(len(num), 1)] ** 2))


def _scored(instance: Instance, moments: Moments) -> Floats:
    """Correlations i < j, connected where there are fields."""
    zz = moments.zz.value
    if instance.has_fields:
        zz = zz - np.outer(moments.z.value, moments.z.value)
    return np.asarray(zz[np.triu_indices(len(zz), 1)])
