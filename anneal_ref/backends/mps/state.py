"""`MPSState`: everything that can be asked of a matrix product state."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.memory import require_memory
from anneal_ref.backends.mps.entropies import entropy, schmidt_values
from anneal_ref.backends.mps.interchange import to_quimb
from anneal_ref.backends.mps.product import Product
from anneal_ref.backends.mps.reading import moments_of
from anneal_ref.backends.mps.sampling import log_probability, sample_spins
from anneal_ref.base.checks import integer, signs
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples

if TYPE_CHECKING:
    from quimb.tensor import MatrixProductState


class MPSState:
    """The state of an anneal at one time, as `MPS` leaves it.

    Attributes
    ----------
    anneal : Anneal
        What was solved.
    at : float
        Fraction of the duration that the state belongs to.
    product : Product
        The tensors.
    ledger : dict
        Deterministic counters and checks of the run, and its wall time in `seconds`. `discarded_weights` and
        `entropies` (nats) are those of the cuts along `site_order`; `work_identity` is a consistency check in the unit
        of the schedule; none of them is an error bar.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(0.0, 1.0))
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> state = ar.MPS(bond_dimension=16, step=0.25).evolve(ar.Anneal(instance, schedule, duration=8.0))
    >>> float((1 - state.moments().zz.value[0, 1]) / 2)
    0.095740
    >>> state.bond_dimensions
    (2, 4, 8, 16, 8, 4, 2)
    """

    def __init__(self, anneal: Anneal, at: float, product: Product, ledger: dict[str, Any]) -> None:
        self.anneal = anneal
        self.at = at
        self.product = product
        self.ledger = ledger
        self._moments: Moments | None = None

    def __repr__(self) -> str:
        """Return size, time and largest bond."""
        largest = max(self.bond_dimensions, default=1)
        return f"<MPSState of {self.anneal.n_sites} spins at {self.at:g}; largest bond {largest}>"

    @property
    def bond_dimensions(self) -> tuple[int, ...]:
        """Dimensions of the N - 1 bonds along the chain."""
        return self.product.bond_dimensions

    def moments(self) -> Moments:
        """Return <Z_i>, <Z_i Z_j> and <X_i>, divided by the norm; `stat` is 0 and `num` is not measured."""
        if self._moments is None:
            z, zz, x = moments_of(self.product)
            self._moments = Moments.of(z, zz, x, how="matrix product state")
        return self._moments

    def energy(self) -> float:
        """Return <H> at the time of the state, in the unit of the schedule."""
        moments, instance = self.moments(), self.anneal.instance
        assert moments.x is not None
        time = self.at * self.anneal.duration
        pairs = np.sum(np.triu(instance.coupling_matrix(), 1) * moments.zz.value)
        problem = pairs + instance.fields @ moments.z.value
        return float(
            self.anneal.problem(time) * problem - self.anneal.transverse(time) * (instance.transverse @ moments.x.value)
        )

    def sample(self, shots: int, seed: int) -> Samples:
        """Return `shots` independent measurements in the Z basis, the same ones for the same seed."""
        shots, seed = integer("shots", shots, low=1), integer("seed", seed, low=0)
        manifest = Manifest(
            instance=self.anneal.instance.identity, duration=self.anneal.duration, source="matrix product state"
        )
        return Samples(sample_spins(self.product, shots, np.random.default_rng(seed)), manifest)

    def log_probability(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Return the natural logarithm of the probability of each row of `spins` (shots, N); -inf where it is zero."""
        return log_probability(self.product, signs("spins", spins, (None, self.anneal.n_sites)))

    def entropy(self, sites: Sequence[int]) -> float:
        """Return the von Neumann entropy, in nats, between the spins on `sites` and all others.

        Any first or last sites of the chain (`product.order`) are allowed, and other sets as far as they are cheap.

        Raises
        ------
        InputError
            A site that is not there or occurs twice.
        NotSupported
            A set of sites that would cost too much; the message tells which are available.
        """
        return entropy(self.product, sites)

    def schmidt_values(self) -> list[NDArray[np.float64]]:
        """Return the Schmidt values at all cuts along the chain, in descending order."""
        return schmidt_values(self.product)

    def amplitudes(self) -> NDArray[np.complex128]:
        """Return all amplitudes, shape (2^N,); site 0 is the least significant bit and bit 0 means +1."""
        require_memory(32 << self.anneal.n_sites, "the array of all amplitudes", ("moments()", "sample(shots, seed)"))
        return self.product.dense()

    def probabilities(self) -> NDArray[np.float64]:
        """Return the probabilities of all configurations, shape (2^N,), in the same order; they add up to 1."""
        probabilities = np.abs(self.amplitudes()) ** 2
        return np.asarray(probabilities / probabilities.sum())

    def to_quimb(self) -> MatrixProductState:
        """Return the state as a quimb `MatrixProductState`; see `anneal_ref.backends.mps.interchange`."""
        return to_quimb(self.product)
