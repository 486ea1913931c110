"""`ExactState`: everything that can be asked of stored amplitudes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.backends.exact.energies import energy_blocks
from anneal_ref.backends.exact.register import Register
from anneal_ref.backends.memory import require_memory
from anneal_ref.base.checks import integer, number, signs
from anneal_ref.base.errors import InputError
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.samples import Samples


class ExactState:
    """The state of an anneal at one time, as `StateVector` leaves it.

    Attributes
    ----------
    anneal : Anneal
        What was solved.
    at : float
        Fraction of the duration that the state belongs to.
    ledger : dict
        Deterministic counters and checks of the run (`scheme`, `steps`, `layers`, `kicks`, `symmetric`, `precision`,
        `bytes`, `norm_drift`, `ground_energy` and `ground_residual` after start="ground"), and its wall time in
        `seconds`.

    Examples
    --------
    >>> import anneal_ref as ar
    >>> schedule = ar.Schedule.linear(transverse=(1.0, 0.0), problem=(0.0, 1.0))
    >>> instance = ar.Instance(ar.lattices.chain(8, periodic=True), [-1.0] * 8)
    >>> state = ar.StateVector().evolve(ar.Anneal(instance, schedule, duration=8.0))
    >>> float((1 - state.moments().zz.value[0, 1]) / 2)
    0.0957402
    >>> state.ground_probability(), state.entropy([0, 1, 2, 3])
    (0.61745, 1.21580)
    """

    def __init__(self, anneal: Anneal, at: float, register: Register, ledger: dict[str, Any]) -> None:
        self.anneal = anneal
        self.at = at
        self.ledger = ledger
        self._register: Register | None = register
        self._moments: Moments | None = None

    def __repr__(self) -> str:
        """Return size, time and scheme."""
        work = f"{self.ledger['layers']} layers of {self.ledger['scheme']}"
        return f"<ExactState of {self.anneal.n_sites} spins at {self.at:g}; {work}>"

    def moments(self) -> Moments:
        """Return <Z_i>, <Z_i Z_j> and <X_i>, divided by the norm; `stat` is 0 and `num` is not measured."""
        if self._moments is None:
            z, zz, x = (values / self._norm for values in self._amplitudes().moments())
            np.fill_diagonal(zz, 1.0)
            self._moments = Moments.of(z, zz, x, how="state vector")
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
            instance=self.anneal.instance.identity, duration=self.anneal.duration, source="state vector"
        )
        return Samples(self._amplitudes().sample(shots, seed), manifest)

    def amplitudes(self) -> NDArray[np.complex128]:
        """Return all amplitudes, shape (2^N,); site 0 is the least significant bit and bit 0 means +1."""
        self._require(16, "the array of all amplitudes")
        return self._amplitudes().amplitudes()

    def probabilities(self) -> NDArray[np.float64]:
        """Return the probabilities of all configurations, shape (2^N,), in the same order; they add up to 1."""
        self._require(8, "the array of all probabilities")
        probabilities = self._amplitudes().probabilities()
        return np.asarray(probabilities / probabilities.sum())

    def log_probability(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Return the natural logarithm of the probability of each row of `spins` (shots, N); -inf where it is zero."""
        register = self._amplitudes()
        rows = signs("spins", spins, (None, self.anneal.n_sites))
        return np.asarray(register.log_probability(rows) - np.log(self._norm))

    def ground_probability(self, ground: ArrayLike | None = None) -> float:
        """Return the probability of the classical ground states, all of them together.

        Parameters
        ----------
        ground : float, or array_like of +1 and -1 with shape (N,), optional
            The ground energy in units of J, or any one ground configuration; found by enumeration if not given.
            Every configuration with at most this energy counts.
        """
        instance = self.anneal.instance
        if ground is None:
            limit = min(float(block.min()) for _, block in energy_blocks(instance))
        elif np.ndim(ground) == 0:
            limit = number("ground", ground)
        else:
            limit = float(instance.energies(signs("ground", ground, (instance.n_sites,))))
        scale = np.abs(instance.couplings).sum() + np.abs(instance.fields).sum()
        limit += 1e-9 * float(scale)
        probabilities = self.probabilities()
        return float(sum(probabilities[k : k + len(e)][e <= limit].sum() for k, e in energy_blocks(instance)))

    def entropy(self, sites: Sequence[int]) -> float:
        """Return the von Neumann entropy, in nats, between the spins on `sites` and all others.

        Any subset of the sites is allowed; the work is that of a matrix of 2^k x 2^k for the smaller side of k spins.

        Raises
        ------
        InputError
            A site that is not there or occurs twice.
        TooLarge
            The amplitudes and the reduced density matrix do not fit into memory.
        """
        n = self.anneal.n_sites
        chosen = [integer(f"sites[{k}]", site, 0, n - 1) for k, site in enumerate(sites)]
        if len(set(chosen)) != len(chosen):
            raise InputError(f"sites must differ from each other; got {chosen}")
        rest = [site for site in range(n) if site not in chosen]
        small, large = sorted((chosen, rest), key=len)
        if not small:
            return 0.0
        require_memory(
            (32 << n) + (64 << 2 * len(small)), f"the entropy of {len(small)} of {n} spins", ("fewer sites",)
        )
        psi = self._amplitudes().amplitudes().reshape((2,) * n)
        # axis k of the tensor is site n - 1 - k
        matrix = psi.transpose([n - 1 - site for site in (*small, *large)]).reshape(1 << len(small), -1)
        weights = np.linalg.eigvalsh(matrix @ matrix.conj().T)
        weights = weights[weights > 0] / weights[weights > 0].sum()
        return float(max(0.0, -np.sum(weights * np.log(weights))))

    @property
    def _norm(self) -> float:
        return 1.0 + float(self.ledger["norm_drift"])

    def release(self) -> None:
        """Give up the amplitudes; moments that have been asked for stay."""
        self._register = None

    def _amplitudes(self) -> Register:
        if self._register is None:
            raise InputError(
                f"the amplitudes at {self.at:g} have moved on to a later time; "
                f"ask a state of states(...) before the next one is taken, or call evolve(anneal, at={self.at:g})"
            )
        return self._register

    def _require(self, bytes_per_amplitude: int, purpose: str) -> None:
        require_memory(bytes_per_amplitude << self.anneal.n_sites, purpose, ("moments()", "sample(shots, seed)"))
