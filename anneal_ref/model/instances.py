"""`Instance`: a lattice with its couplings, fields and transverse weights."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import choice, finite, frozen, integer, signs
from anneal_ref.base.errors import InputError
from anneal_ref.base.identity import digest
from anneal_ref.model.disorder import Law
from anneal_ref.model.instance_files import read_instance, write_instance
from anneal_ref.model.lattice import Lattice, whole

NORMALISATIONS: dict[str, Callable[[Lattice], float]] = {
    "sqrt_n": lambda lattice: lattice.n_sites**0.5,
    "sqrt_degree": lambda lattice: (2 * lattice.n_edges / lattice.n_sites) ** 0.5 or 1.0,
    "n": lambda lattice: float(lattice.n_sites),
}


@dataclass(frozen=True, slots=True, eq=False)
class Instance:
    """A problem: E(z) = sum over edges of J_ij z_i z_j + sum_i h_i z_i, and the weights w_i of the transverse field.

    Parameters
    ----------
    lattice : Lattice
    couplings : array_like, shape (n_edges,)
        J in the order of `lattice.edges`; positive is antiferromagnetic.
    fields : array_like, shape (n_sites,), optional
        h; zero by default.
    transverse : array_like, shape (n_sites,), optional
        w, at least 0; one by default.
    name : str, optional
        For tables; by default the name of the lattice.

    Raises
    ------
    InputError
        Arrays of the wrong length, NaN or infinity, negative weights.

    Examples
    --------
    >>> from anneal_ref.model.lattices import chain
    >>> instance = Instance(chain(3), [1.0, -0.5], fields=[0.0, 0.0, 0.25])
    >>> instance
    <Instance chain 3: 3 sites, 2 couplings, fields>
    >>> instance.energies([[1, -1, -1], [1, 1, 1]]).tolist()
    [-1.75, 0.75]
    """

    lattice: Lattice
    couplings: NDArray[np.float64]
    fields: NDArray[np.float64]
    transverse: NDArray[np.float64]
    name: str

    def __init__(
        self,
        lattice: Lattice,
        couplings: ArrayLike,
        fields: ArrayLike | None = None,
        transverse: ArrayLike | None = None,
        name: str | None = None,
    ) -> None:
        if not isinstance(lattice, Lattice):
            raise InputError(f"lattice must be a Lattice; got a {type(lattice).__name__}; see anneal_ref.lattices")
        n = lattice.n_sites
        weights = _per_site("transverse", np.ones(n) if transverse is None else transverse, n)
        if (weights < 0).any():
            site = int(np.flatnonzero(weights < 0)[0])
            raise InputError(f"transverse weights must be at least 0; got {weights[site]} at site {site}")
        object.__setattr__(self, "lattice", lattice)
        object.__setattr__(self, "couplings", _per_edge(couplings, lattice))
        object.__setattr__(self, "fields", _per_site("fields", np.zeros(n) if fields is None else fields, n))
        object.__setattr__(self, "transverse", weights)
        object.__setattr__(self, "name", lattice.name if name is None else str(name))

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle through the constructor, which makes the arrays read-only again."""
        return Instance, (self.lattice, self.couplings, self.fields, self.transverse, self.name)

    @property
    def n_sites(self) -> int:
        """Number of spins."""
        return self.lattice.n_sites

    @property
    def n_edges(self) -> int:
        """Number of couplings."""
        return self.lattice.n_edges

    @property
    def has_fields(self) -> bool:
        """Whether any field differs from zero; without fields the model is symmetric under a global spin flip."""
        return bool(self.fields.any())

    @property
    def identity(self) -> str:
        """SHA-256 of the Hamiltonian: sites, couplings that differ from zero, fields, weights.

        The order and direction of edges, edges of zero coupling, coordinates, labels and names do not enter.
        """
        low, high = self.lattice.edges.min(axis=1), self.lattice.edges.max(axis=1)
        order = np.lexsort((high, low))
        order = order[self.couplings[order] != 0]
        return digest(
            {
                "instance": 1,
                "n_sites": self.n_sites,
                "edges": np.stack([low[order], high[order]], axis=1).astype(np.int64),
                "couplings": self.couplings[order],
                "fields": self.fields,
                "transverse": self.transverse,
            }
        )

    def coupling_matrix(self) -> NDArray[np.float64]:
        """Return the symmetric matrix of couplings, shape (n_sites, n_sites), with a zero diagonal."""
        matrix = np.zeros((self.n_sites, self.n_sites))
        i, j = self.lattice.edges.T
        matrix[i, j] = matrix[j, i] = self.couplings
        return matrix

    def energies(self, spins: ArrayLike) -> NDArray[np.float64]:
        """Return the problem energy of each configuration.

        Parameters
        ----------
        spins : array_like of +1 and -1, shape (..., n_sites)

        Returns
        -------
        ndarray, shape (...)
        """
        values = np.asarray(spins)
        if values.ndim == 0 or values.shape[-1] != self.n_sites:
            raise InputError(
                f"spins must have shape (..., {self.n_sites}), one for each site; got shape {values.shape}"
            )
        z = signs("spins", values).astype(np.float64)
        half = np.triu(self.coupling_matrix())
        return np.asarray(np.einsum("...i,...i->...", z @ half + self.fields, z))

    def gauge(self, sign_vector: ArrayLike) -> Instance:
        """Return the instance seen through a gauge: J_ij g_i g_j and h_i g_i. Spins z become g z, energies stay.

        Parameters
        ----------
        sign_vector : array_like of +1 and -1, shape (n_sites,)
        """
        g = signs("sign_vector", sign_vector, (self.n_sites,)).astype(np.float64)
        i, j = self.lattice.edges.T
        return Instance(self.lattice, self.couplings * g[i] * g[j], self.fields * g, self.transverse, self.name)

    def relabelled(self, order: ArrayLike) -> Instance:
        """Return the same physics with sites in another order: new site k is the old site order[k].

        The identity changes, because the order of the sites is part of it.

        Parameters
        ----------
        order : array_like of int, shape (n_sites,)
        """
        lattice = self.lattice.relabelled(order)
        old = whole("order", order, (self.n_sites,))
        return Instance(lattice, self.couplings, self.fields[old], self.transverse[old], self.name)

    def to_dict(self) -> dict[str, Any]:
        """Return all content as plain data, edges in their order; floats keep every bit."""
        lattice = self.lattice
        return {
            "name": self.name,
            "lattice": lattice.name,
            "n_sites": self.n_sites,
            "edges": lattice.edges.tolist(),
            "couplings": self.couplings.tolist(),
            "fields": self.fields.tolist(),
            "transverse": self.transverse.tolist(),
            "labels": lattice.labels.tolist(),
            "coordinates": None if lattice.coordinates is None else lattice.coordinates.tolist(),
            "recipe": lattice.recipe,
        }

    @classmethod
    def from_dict(cls, content: Mapping[str, Any]) -> Instance:
        """Make an instance again from its `to_dict`."""
        lattice = Lattice(
            content["n_sites"],
            content["edges"],
            content["coordinates"],
            content["lattice"],
            content["labels"],
            content["recipe"],
        )
        return cls(lattice, content["couplings"], content["fields"], content["transverse"], content["name"])

    def write(self, path: str | os.PathLike[str]) -> None:
        """Write a JSON file that `read` turns into the same instance, bit by bit.

        Raises
        ------
        InputError
            The file cannot be written; an old file of that name is untouched.
        """
        write_instance(path, self.to_dict(), self.identity)

    @classmethod
    def read(cls, path: str | os.PathLike[str]) -> Instance:
        """Read a file of `write`.

        Raises
        ------
        InputError
            Names the file and the key: missing or malformed file, unknown or missing keys, values that are not
            allowed, contents that do not match the identity written beside them.
        """
        content, identity = read_instance(path)
        try:
            instance = cls.from_dict(content)
        except InputError as error:
            raise InputError(f"{os.fspath(path)}: {error}") from error
        if identity is not None and identity != instance.identity:
            raise InputError(
                f"{os.fspath(path)}: the contents (identity {instance.identity[:12]}) do not match the key `identity` "
                f"({identity[:12]}); restore the file, or take that key away if the change was meant"
            )
        return instance

    def describe(self) -> dict[str, str | int]:
        """Return a row for a table: name, size, ranges of couplings and fields, start of the identity."""
        return {
            "instance": self.name,
            "sites": self.n_sites,
            "edges": self.n_edges,
            "couplings": _range(self.couplings),
            "fields": _range(self.fields),
            "identity": self.identity[:12],
        }

    def __repr__(self) -> str:
        """Return name and size in angle brackets."""
        fields = ", fields" if self.has_fields else ""
        return f"<Instance {self.name}: {self.n_sites} sites, {self.n_edges} couplings{fields}>"


def draw_instance(
    lattice: Lattice,
    couplings: Law,
    fields: Law | None = None,
    transverse: Law | None = None,
    seed: int = 0,
    index: int = 0,
    normalise: str | None = None,
) -> Instance:
    """Draw a member of an ensemble of disordered instances.

    Parameters
    ----------
    lattice : Lattice
    couplings, fields, transverse : law of `anneal_ref.disorder`
        Drawn from independent streams: adding fields does not change the couplings.
    seed : int
        Names the ensemble, from 0 to 2^64 - 1.
    index : int
        Names the member, from 0 to 2^64 - 1.
    normalise : {None, "sqrt_n", "sqrt_degree", "n"}
        Divide the couplings by the square root of n_sites (spin glasses on dense graphs), by that of the mean degree
        (any graph), or by n_sites (couplings of one sign on the complete graph), so that energies grow like n_sites.
        Fields are not divided.

    Returns
    -------
    Instance
        The same on every platform for the same arguments.

    Raises
    ------
    InputError

    Examples
    --------
    >>> import anneal_ref as ar
    >>> instance = ar.draw_instance(ar.lattices.square(4, 5), ar.disorder.plus_minus(), seed=11, index=3)
    >>> instance.name
    'square 4x5, seed 11, index 3'
    """
    for name, law in (("couplings", couplings), ("fields", fields), ("transverse", transverse)):
        if not hasattr(law, "draw") and (law is not None or name == "couplings"):
            raise InputError(
                f"{name} must be a law such as disorder.plus_minus(); got {law!r}; use Instance for numbers"
            )
    seed, index = integer("seed", seed, low=0), integer("index", index, low=0)
    values = couplings.draw(lattice.n_edges, seed, index, "couplings")
    if normalise is not None:
        values = values / NORMALISATIONS[choice("normalise", normalise, NORMALISATIONS)](lattice)
    return Instance(
        lattice,
        values,
        None if fields is None else fields.draw(lattice.n_sites, seed, index, "fields"),
        None if transverse is None else transverse.draw(lattice.n_sites, seed, index, "transverse"),
        f"{lattice.name}, seed {seed}, index {index}",
    )


def _per_edge(values: ArrayLike, lattice: Lattice) -> NDArray[np.float64]:
    couplings = finite("couplings", values)
    if couplings.shape != (lattice.n_edges,):
        raise InputError(
            f"couplings must have shape ({lattice.n_edges},), one for each edge of the lattice in the order of "
            f"lattice.edges; got shape {couplings.shape}"
        )
    return frozen(couplings + 0.0)


def _per_site(name: str, values: ArrayLike, n: int) -> NDArray[np.float64]:
    array = finite(name, values)
    if array.shape != (n,):
        raise InputError(f"{name} must have shape ({n},), one for each site; got shape {array.shape}")
    return frozen(array + 0.0)


def _range(values: NDArray[np.float64]) -> str:
    if not values.size or not values.any():
        return "none"
    low, high = values.min(), values.max()
    return f"{low:.4g}" if low == high else f"{low:.4g} to {high:.4g}"
