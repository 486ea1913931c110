"""`Moments`: what a final state, a processor or a null hypothesis says about one and two spins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate


@dataclass(frozen=True, slots=True, eq=False)
class Moments:
    """Expectation values of Z_i, Z_i Z_j and, where they are known, X_i, each with its errors.

    Parameters
    ----------
    z : Estimate, shape (n_sites,)
        <Z_i>.
    zz : Estimate, shape (n_sites, n_sites)
        <Z_i Z_j>, symmetric, with an exact 1 on the diagonal (Z^2 = 1 is an identity, not a measurement).
    x : Estimate, shape (n_sites,), optional
        <X_i>; None where the source knows only the Z basis, as samples do.

    Raises
    ------
    InputError
        Shapes that do not fit each other, a `zz` that is not symmetric or does not have 1 on its diagonal.

    Examples
    --------
    >>> moments = Moments.of([0.0, 0.0], [[1.0, -0.5], [-0.5, 1.0]])
    >>> float(moments.zz.value[0, 1])
    -0.5
    """

    z: Estimate
    zz: Estimate
    x: Estimate | None = None

    def __post_init__(self) -> None:
        """Check shapes, symmetry and diagonal."""
        n = self.z.shape[0] if len(self.z.shape) == 1 else 0
        if len(self.z.shape) != 1:
            raise InputError(f"z must have shape (n_sites,); got shape {self.z.shape}")
        if self.zz.shape != (n, n):
            raise InputError(f"zz must have shape ({n}, {n}) to go with {n} values of z; got shape {self.zz.shape}")
        if self.x is not None and self.x.shape != (n,):
            raise InputError(f"x must have shape ({n},) to go with {n} values of z; got shape {self.x.shape}")
        zz = self.zz.value
        if np.any(np.abs(zz - zz.T) > 1e-12 * np.maximum(1.0, np.abs(zz))):
            i, j = (int(k) for k in np.argwhere(np.abs(zz - zz.T) == np.abs(zz - zz.T).max())[0])
            raise InputError(f"zz must be symmetric; got zz[{i}, {j}] = {zz[i, j]} and zz[{j}, {i}] = {zz[j, i]}")
        off = np.abs(np.diagonal(zz) - 1.0)
        if np.any(off > 1e-12):
            i = int(off.argmax())
            raise InputError(f"zz must be 1 on its diagonal, since Z^2 = 1; got zz[{i}, {i}] = {zz[i, i]}")

    @classmethod
    def of(cls, z: ArrayLike, zz: ArrayLike, x: ArrayLike | None = None, how: str = "computed") -> Moments:
        """Return moments from plain values: no statistical error, numerical error not measured."""
        return cls(Estimate(z, how=how), Estimate(zz, how=how), None if x is None else Estimate(x, how=how))

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.z.shape[0]

    def __repr__(self) -> str:
        """Return the sizes and the largest errors."""
        x = "" if self.x is None else f", x: {self.x}"
        return f"<Moments of {self.n_sites} spins; z: {self.z}; zz: {self.zz}{x}>"
