"""Problem energies of all configurations, in blocks of ascending basis index."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from anneal_ref.model.instances import Instance

_BLOCK_BITS = 16


def energy_blocks(instance: Instance) -> Iterator[tuple[int, NDArray[np.float64]]]:
    """Give (index of the first configuration, energies) until all 2^N configurations have had their turn.

    Site 0 is the least significant bit of the index, and bit 0 means +1. Energies are in units of J.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> [(start, block.tolist()) for start, block in energy_blocks(ar.Instance(ar.lattices.chain(2), [1.0]))]
    [(0, [1.0, -1.0, -1.0, 1.0])]
    """
    n = instance.n_sites
    low = min(n, _BLOCK_BITS)
    couplings, fields = instance.coupling_matrix(), np.asarray(instance.fields)
    inner = _doubled(couplings[:low, :low], np.zeros(low))
    none = np.zeros((low, low))
    for high in range(1 << (n - low)):
        spins = 1.0 - 2.0 * ((high >> np.arange(n - low)) & 1)
        outer = spins @ np.triu(couplings[low:, low:], 1) @ spins + spins @ fields[low:]
        yield high << low, inner + _doubled(none, fields[:low] + couplings[:low, low:] @ spins) + outer


def _doubled(couplings: NDArray[np.float64], fields: NDArray[np.float64]) -> NDArray[np.float64]:
    """Energies of all configurations of a few spins, one spin more at each doubling."""
    energies = np.zeros(1)
    for i, field in enumerate(fields):
        local = np.full(1, field)
        for j in range(i):
            local = np.concatenate([local + couplings[i, j], local - couplings[i, j]])
        energies = np.concatenate([energies + local, energies - local])
    return energies
