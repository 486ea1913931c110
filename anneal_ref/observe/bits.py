"""Spins as packed bits: bit 0 means +1, site 0 is the lowest bit of the first byte, as in basis-state indices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.base.errors import InputError


def pack(spins: NDArray[np.int8]) -> NDArray[np.uint8]:
    """Return spins, shape (..., n_sites), as bytes, shape (..., ceil(n_sites/8)).

    Examples
    --------
    >>> pack(np.array([[1, -1, 1, -1]], dtype=np.int8))
    array([[10]], dtype=uint8)
    """
    return np.packbits(spins < 0, axis=-1, bitorder="little")


def unpack(bits: NDArray[np.uint8], n_sites: int) -> NDArray[np.int8]:
    """Return the spins, shape (..., n_sites), of packed bits.

    Raises
    ------
    InputError
        A number of bytes that does not go with the number of sites, or bits set beyond the last site.
    """
    if bits.dtype != np.uint8 or bits.ndim == 0 or bits.shape[-1] != -(-n_sites // 8):
        raise InputError(
            f"packed bits of {n_sites} sites are {-(-n_sites // 8)} bytes to a shot; "
            f"got {bits.dtype} of shape {bits.shape}"
        )
    spare = 8 * bits.shape[-1] - n_sites
    if spare and np.any(bits[..., -1] >> (8 - spare)):
        raise InputError(f"{n_sites} sites leave the last bits of a shot unset; some are set, so the number is wrong")
    flags = np.unpackbits(bits, axis=-1, count=n_sites, bitorder="little")
    return np.asarray(1 - 2 * flags.view(np.int8), dtype=np.int8)
