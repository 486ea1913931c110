r"""Entropies of stretches of a chain.

A stretch A of neighbouring spins has the operators of its own Majoranas, so that its state is Gaussian. The state of
the whole chain is pure, Gamma^2 = -1, and therefore the eigenvalues +-i n of the block of A follow from the singular
values s of the block between A and all others, s^2 = 1 - n^2. The entropy is a sum over them; each comes twice,

    S = - 1/2 sum [ (1 + n)/2 ln (1 + n)/2 + (1 - n)/2 ln (1 - n)/2 ],      (1 - n)/2 = s^2 / (2 (1 + n)),

and only operators near the ends of A have partners outside.

Spins on several stretches of one chain have strings of the spins in between in their products, and are not Gaussian
(F. Igloi and I. Peschel, EPL 89, 40001 (2010), from memory); what is left of a chain when one stretch is taken out has
the entropy of that stretch. Different chains are independent.

Reference: G. Vidal, J. I. Latorre, E. Rico, A. Kitaev, Phys. Rev. Lett. 90, 227902 (2003).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.fermions.chains import Chain
from anneal_ref.backends.fermions.covariance import Covariance
from anneal_ref.backends.memory import require_memory
from anneal_ref.base.errors import NotSupported


def entropy(covariance: Covariance, chain: Chain, places: NDArray[np.intp]) -> float:
    """Return the entropy, in nats, of the spins at these positions.

    Raises
    ------
    NotSupported
        In one of the chains neither the positions nor those left out form one stretch.
    TooLarge
    """
    taken = np.zeros(chain.n_sites, dtype=bool)
    taken[places] = True
    return sum(
        (
            _of_stretch(covariance, *_stretch(np.flatnonzero(chain.parts == part), taken, chain))
            for part in np.unique(chain.parts[taken])
        ),
        0.0,
    )


def _stretch(positions: NDArray[np.intp], taken: NDArray[np.bool_], chain: Chain) -> tuple[int, int]:
    """Return start and length of the stretch of one chain, or round a ring, that stands for the positions taken."""
    inside = taken[positions]
    for chosen in (inside, ~inside):
        starts = np.flatnonzero(chosen & ~np.concatenate([[chosen[-1] and chain.ring], chosen[:-1]]))
        if chosen.all() or not chosen.any():
            return 0, 0
        if len(starts) == 1:
            return int(positions[starts[0]]), int(np.count_nonzero(chosen))
    raise NotSupported(
        "free fermions give the entropy of sites that are neighbours in a row, or of all but such; in the order of the "
        f"chain {chain.order[positions].tolist()} the sites {sorted(chain.order[positions[inside]].tolist())} are not",
        ("StateVector()", "sites that are neighbours in a row"),
    )


def _of_stretch(covariance: Covariance, start: int, count: int) -> float:
    if count == 0:
        return 0.0
    # on a ring, indices go on beyond its ends
    first, stop, reach = 2 * start, 2 * (start + count), covariance.reach
    inside = _ends(first, stop, reach)
    if covariance.ring:
        outside = _ends(stop, first + 2 * covariance.n_sites, reach)
    else:
        last = 2 * covariance.n_sites
        outside = np.concatenate([np.arange(max(0, first - reach), first), np.arange(stop, min(last, stop + reach))])
    require_memory(32 * len(inside) * len(outside), f"the entropy of {count} spins", ("sites at the end of a chain",))
    crossing = covariance.elements(inside[:, None], outside[None, :])
    squares = np.minimum(1.0, np.linalg.svd(crossing, compute_uv=False) ** 2)
    larger = (1.0 + np.sqrt(1.0 - squares)) / 2
    smaller = squares / (4 * larger)
    smaller = np.where(smaller > 0, smaller, 1.0)
    return float(-np.sum(larger * np.log(larger) + smaller * np.log(smaller)) / 2)


def _ends(first: int, stop: int, reach: int) -> NDArray[np.intp]:
    """Return the indices from first to stop - 1, but for those further than `reach` from both."""
    if stop - first <= 2 * reach:
        return np.arange(first, stop)
    return np.concatenate([np.arange(first, first + reach), np.arange(stop - reach, stop)])
