"""`Samples`: the spins that a processor, or any other source, gave, with what is known about the run."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from anneal_ref.base.checks import choice, finite, frozen, integer
from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.observe import resample
from anneal_ref.observe.bits import pack
from anneal_ref.observe.counting import count_moments
from anneal_ref.observe.joining import join_groups, join_manifests, unevenness
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.moments import Moments
from anneal_ref.observe.reading import read, write

if TYPE_CHECKING:
    from anneal_ref.model.anneal import Anneal
    from anneal_ref.model.instances import Instance


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """Spin configurations, a shot a row; immutable.

    Parameters
    ----------
    spins : array_like of +1 and -1, shape (n_shots, n_sites)
        At least one shot and one site; copied.
    manifest : Manifest
        What is known about the run.
    groups : array_like of int, shape (n_shots,), optional
        Which gauge, batch or run each shot comes from. Shots of one group are resampled together.

    Raises
    ------
    InputError
        Anything but +1 and -1, no shots, another number of columns than the manifest speaks of.

    Examples
    --------
    >>> from anneal_ref.observe.observables import q2
    >>> samples = Samples(1 - 2 * np.random.default_rng(1).integers(0, 2, (500, 6)))
    >>> print(samples.estimate(q2))      # the plain square would be 0.002 too large
    0.0013 ± 0.0013 (stat)
    """

    spins: NDArray[np.int8]
    manifest: Manifest
    groups: NDArray[np.int64] | None

    def __init__(self, spins: ArrayLike, manifest: Manifest | None = None, groups: ArrayLike | None = None) -> None:
        array = _spins(spins)
        manifest = Manifest() if manifest is None else manifest
        if manifest.n_columns not in (None, array.shape[1]):
            raise InputError(f"the manifest speaks of {manifest.n_columns} sites; the samples have {array.shape[1]}")
        object.__setattr__(self, "spins", array)
        object.__setattr__(self, "manifest", manifest)
        object.__setattr__(self, "groups", None if groups is None else _groups(groups, len(array)))

    @property
    def n_shots(self) -> int:
        """Number of shots."""
        return int(self.spins.shape[0])

    @property
    def n_sites(self) -> int:
        """Number of spins in a shot."""
        return int(self.spins.shape[1])

    @property
    def n_groups(self) -> int:
        """Number of different groups; 0 where none are known."""
        return 0 if self.groups is None else len(np.unique(self.groups))

    @property
    def bits(self) -> NDArray[np.uint8]:
        """The spins as packed bits, shape (n_shots, ceil(n_sites/8)); see `pack`."""
        return pack(self.spins)

    def __len__(self) -> int:
        """Return the number of shots."""
        return self.n_shots

    def __repr__(self) -> str:
        """Return the sizes and what the manifest says."""
        groups = "" if self.groups is None else f" in {self.n_groups} groups"
        known = ", ".join(self.manifest.to_dict())
        return f"<Samples: {self.n_shots} shots of {self.n_sites} spins{groups}; manifest: {known or 'empty'}>"

    @classmethod
    def read(
        cls, path: str | Path, values: Literal["spins", "bits"] | None = None, manifest: Manifest | None = None
    ) -> Samples:
        """Read samples from CSV (.csv, .txt, .dat), NPY, NPZ or HDF5 (.h5, .hdf5); see `anneal_ref.observe.reading`.

        Parameters
        ----------
        path : path
            The file. A sidecar `<file>.manifest.json`, where there is one, is read too.
        values : {"spins", "bits"}, optional
            Whether the file holds +1 and -1, or 0 (for +1) and 1 (for -1), where it does not say so itself and no -1
            in it does. HDF5 and NPZ files that say are read as they say.
        manifest : Manifest, optional
            What the caller knows about the run; must not contradict the file.

        Raises
        ------
        InputError
            A missing, empty or malformed file (the line is named), a value that is not allowed, a file that does not
            say what its ones mean, text that says otherwise than `values`, manifests that contradict each other.
        """
        spins, found, groups = read(Path(path), values, manifest)
        return cls(spins, found, groups)

    def write(self, path: str | Path) -> None:
        """Write the samples in the format that the suffix names; an existing file is replaced in one step.

        Raises
        ------
        InputError
            A suffix that is not known; groups in NPY, which has no room for them.
        """
        write(Path(path), self.spins, self.manifest, self.groups)

    @classmethod
    def concatenate(cls, runs: Sequence[Samples]) -> Samples:
        """Return the shots of several runs of one instance, with gauges undone and the origin of each shot kept.

        The groups of the result are the gauges where any run has one, else the batches where any run has one, else the
        runs; groups that a run has already stay apart. A single run comes back with its gauge undone and no new groups.

        Raises
        ------
        InputError
            No runs, or runs that differ in instance, duration, sites or number of spins.

        Warns
        -----
        AnnealRefWarning
            Some runs give a gauge and others none; without gauges, some give a batch and others none.
        """
        note = uneven(runs, [f"run {k}" for k in range(len(runs))])
        if note:
            warnings.warn(note, AnnealRefWarning, stacklevel=2)
        return join(runs)

    def ungauged(self) -> Samples:
        """Return the samples with the gauge of the manifest undone, s_i -> g_i s_i, if there is one to undo."""
        gauge = self.manifest.gauge
        if gauge is None or self.manifest.undone:
            return self
        return Samples(self.spins * gauge, self.manifest.replace(undone=True), self.groups)

    def select(self, sites: ArrayLike) -> Samples:
        """Return the columns with the given device labels, in that order.

        Where the manifest has no sites, the numbers of the columns count as their labels.

        Raises
        ------
        InputError
            Labels that the samples do not have, or that occur twice.
        """
        own = np.arange(self.n_sites) if self.manifest.sites is None else self.manifest.sites
        wanted = Manifest(sites=sites).sites
        assert wanted is not None
        missing = sorted(set(wanted.tolist()) - set(own.tolist()))
        if missing:
            raise InputError(f"the samples have no site {_list(missing)}; they have {_list(own.tolist())}")
        place = {label: column for column, label in enumerate(own.tolist())}
        columns = np.array([place[label] for label in wanted.tolist()], dtype=np.intp)
        gauge = self.manifest.gauge
        manifest = self.manifest.replace(
            sites=None if self.manifest.sites is None else wanted, gauge=None if gauge is None else gauge[columns]
        )
        return Samples(self.spins[:, columns], manifest, self.groups)

    def for_instance(self, instance: Instance, duration: float | None = None) -> Samples:
        """Return the samples in the order of the instance's sites with the gauge undone, or refuse them.

        Parameters
        ----------
        instance : Instance
            Held against the identity in the manifest. Columns are brought into the order of `instance.lattice.labels`;
            columns without labels are taken to be in that order.
        duration : float, optional
            Held against the duration in the manifest.

        Raises
        ------
        InputError
            Another instance, another duration, another number of sites, missing or surplus device labels.
        """
        known = self.manifest
        if known.instance is not None and known.instance != instance.identity:
            gauge = known.gauge
            comparable = gauge is not None and len(gauge) == instance.n_sites
            programmed = gauge is not None and comparable and known.instance == instance.gauge(gauge).identity
            hint = (
                "; it is this instance as programmed with the gauge, but the manifest must name it before the gauge"
                if programmed
                else "; pair the file with its own instance"
            )
            names = f"manifest {known.instance[:12]}, this {instance.identity[:12]}"
            raise InputError(f"samples of another instance: {names}{hint}")
        if duration is not None and known.duration is not None and abs(known.duration - duration) > 1e-9 * duration:
            raise InputError(f"samples of another anneal: their duration is {known.duration:g}, not {duration:g}")
        labels = np.asarray(instance.lattice.labels)
        if known.sites is None:
            if self.n_sites != instance.n_sites:
                raise InputError(f"samples of {self.n_sites} spins do not fit an instance of {instance.n_sites}")
            return self.ungauged()
        missing = sorted(set(labels.tolist()) - set(known.sites.tolist()))
        surplus = sorted(set(known.sites.tolist()) - set(labels.tolist()))
        if missing or surplus:
            parts = [f"the samples lack {_list(missing)}"] if missing else []
            parts += [f"the lattice has no {_list(surplus)} (select(...) takes columns out)"] if surplus else []
            raise InputError(f"device labels of the samples do not fit the lattice: {'; '.join(parts)}")
        return self.select(labels).ungauged()

    def for_anneal(self, anneal: Anneal) -> Samples:
        """Return the samples made ready for an anneal: `for_instance` with its instance and its duration."""
        return self.for_instance(anneal.instance, anneal.duration)

    def moments(self) -> Moments:
        """Return <Z_i> and <Z_i Z_j> with standard errors.

        The error is sqrt((1 - c^2)/(n - 1)) for independent shots, and comes from the spread between groups where there
        are groups. In both, c is drawn towards 0 as if four uniformly random shots had been seen beside the n: a
        correlation measured as exactly +1 or -1 gets an error of about sqrt(8)/n instead of 0. The diagonal of `zz`
        is an identity and exact; `num` is 0 because counting spins involves no numerical approximation.

        Raises
        ------
        InputError
            The gauge of the manifest has not been undone.

        References
        ----------
        A. Agresti and B. A. Coull, Am. Stat. 52, 119 (1998): four imagined observations.
        """
        self._require_ungauged()
        resample.warn_if_few(self.groups)
        return count_moments(self.spins, self.groups)

    def sample(self, shots: int, seed: int) -> Samples:
        """Return shots drawn with replacement: the samples as a source of their own empirical distribution.

        The draws know nothing of what was not measured, so errors computed from more draws than there were shots are
        too small.
        """
        shots = integer("shots", shots, low=1)
        index = np.random.default_rng(integer("seed", seed, low=0)).integers(0, self.n_shots, size=shots)
        return Samples(self.spins[index], self.manifest, None if self.groups is None else self.groups[index])

    def estimate(
        self,
        f: Callable[[Any], ArrayLike],
        of: Literal["moments", "spins"] = "moments",
        method: Literal["jackknife", "bootstrap"] = "jackknife",
        replicas: int = 1000,
        seed: int = 0,
    ) -> Estimate:
        """Return f with its bias of order 1/n taken away, and its standard error.

        Shots are resampled as a whole, so f may combine entries that vary together. A square of measured moments is
        biased; this is the way to an unbiased one. For every f that is quadratic in the moments (q2, connected
        correlations, squared deviations from a truth) the jackknife is unbiased exactly; for others, such as ratios,
        the rest is of order 1/n^2. The jackknife does not hold for functions that are not smooth (medians, quantiles,
        largest values): use the bootstrap there.

        Parameters
        ----------
        f : callable
            A plain function of `Moments` (of="moments") or of the spins, shape (shots, n_sites) (of="spins").
        of : {"moments", "spins"}
            What f takes.
        method : {"jackknife", "bootstrap"}
            The bootstrap repeats shots: a function that sums over distinct pairs of shots (overlaps) must take the
            jackknife.
        replicas : int
            Bootstrap: number of replicas. Jackknife without groups: largest number of blocks; more shots than
            this are left out a stretch at a time (spins: at most 100 blocks, for f costs more there).
        seed : int
            Of the bootstrap.

        Returns
        -------
        Estimate
            Where all replicas agree, as on samples that never left the ground state, resampling sees no error; `stat`
            is then the change of f when four uniformly random shots join the measured ones, over sqrt(2), the rule of
            `moments`.

        Raises
        ------
        InputError
            Fewer than two shots, a gauge that has not been undone, an f whose value is no finite number.

        Warns
        -----
        AnnealRefWarning
            Fewer than eight groups.
        """
        self._require_ungauged()
        choice("of", of, ("moments", "spins"))
        choice("method", method, ("jackknife", "bootstrap"))
        replicas = integer("replicas", replicas, low=2)
        seed = integer("seed", seed, low=0)
        resample.warn_if_few(self.groups)
        most = 1000 if method == "bootstrap" else replicas
        parts = resample.blocks(self.n_shots, self.groups, most if of == "moments" else min(most, 100))
        draws = resample.multiplicities(len(parts), replicas, seed) if method == "bootstrap" else None
        resampled = resample.estimate_of_moments if of == "moments" else resample.estimate_of_spins
        return resampled(f, self.spins, parts, draws)

    def _require_ungauged(self) -> None:
        if self.manifest.gauge is not None and not self.manifest.undone:
            raise InputError(
                "the gauge of these samples has not been undone; call .ungauged() or .for_instance(instance) first"
            )


def join(runs: Sequence[Samples]) -> Samples:
    """Return the shots of several runs as `Samples.concatenate` does, without a warning about missing gauges."""
    if not runs:
        raise InputError("concatenate takes at least one run; got none")
    plain = [run.ungauged() for run in runs]
    if len(plain) == 1:
        return plain[0]
    for k, run in enumerate(plain):
        if run.n_sites != plain[0].n_sites:
            sizes = f"run 0 has {plain[0].n_sites}, run {k} has {run.n_sites}"
            raise InputError(f"runs must have the same number of spins; {sizes}")
    manifests, own = _marks(plain)
    groups = join_groups(manifests, own, [run.n_shots for run in plain])
    return Samples(np.concatenate([run.spins for run in plain]), join_manifests(manifests), groups)


def uneven(runs: Sequence[Samples], names: Sequence[str]) -> str | None:
    """Say which runs give no gauge, or else no batch, where others do; None if they are alike."""
    return unevenness(*_marks(runs), names)


def _marks(runs: Sequence[Samples]) -> tuple[list[Manifest], list[NDArray[np.int64] | None]]:
    return [run.manifest for run in runs], [run.groups for run in runs]


def _spins(spins: ArrayLike) -> NDArray[np.int8]:
    try:
        array = np.asarray(spins)
    except (TypeError, ValueError) as error:
        raise InputError(
            f"spins must be an array of shape (n_shots, n_sites), every shot with the same number of spins: {error}"
        ) from error
    if array.ndim != 2 or 0 in array.shape:
        raise InputError(f"spins must have shape (n_shots, n_sites) with at least one of each; got shape {array.shape}")
    if array.dtype.kind not in "if":
        raise InputError(f"spins must be numbers +1 and -1; got dtype {array.dtype}")
    bad = (array != 1) & (array != -1)
    if bad.any():
        shot, site = (int(k) for k in np.argwhere(bad)[0])
        raise InputError(
            f"spins must hold +1 and -1 only; got {array[shot, site]} in shot {shot}, site {site} "
            "(bits b are spins 1 - 2 b)"
        )
    return frozen(array.astype(np.int8))


def _groups(groups: ArrayLike, n_shots: int) -> NDArray[np.int64]:
    array = finite("groups", groups, (n_shots,))
    if np.any(array != np.round(array)):
        raise InputError(f"groups must be whole numbers; got {array[array != np.round(array)][0]}")
    return frozen(array.astype(np.int64))


def _list(labels: list[int], most: int = 12) -> str:
    """Return labels as text, the first few of many."""
    return ", ".join(map(str, labels[:most])) + (f" and {len(labels) - most} more" if len(labels) > most else "")
