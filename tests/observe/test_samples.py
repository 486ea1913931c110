from __future__ import annotations

import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from anneal_ref.base.errors import AnnealRefWarning, InputError
from anneal_ref.model import lattices
from anneal_ref.model.instances import Instance
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.observables import problem_energy, q2
from anneal_ref.observe.samples import Samples


@pytest.fixture(scope="module")
def instance() -> Instance:
    """Five sites of a 2 x 3 rectangle whose site 2 is dead: labels 0, 1, 3, 4, 5."""
    lattice = lattices.square(2, 3).diluted(dead=[2])
    rng = np.random.default_rng(8)
    return Instance(lattice, rng.standard_normal(len(lattice.edges)), rng.standard_normal(5))


@pytest.fixture(scope="module")
def spins() -> np.ndarray:
    return 1 - 2 * np.random.default_rng(2).integers(0, 2, (40, 5), dtype=np.int8)


def test_spins_are_copied_and_fixed(spins: np.ndarray) -> None:
    mine = spins.copy()
    samples = Samples(mine)
    mine[0, 0] *= -1
    np.testing.assert_array_equal(samples.spins, spins)
    with pytest.raises(ValueError, match="read-only"):
        samples.spins[0, 0] = 1
    assert (samples.n_shots, samples.n_sites, len(samples), samples.n_groups) == (40, 5, 40, 0)
    assert samples.bits.shape == (40, 1)
    assert "40 shots of 5 spins; manifest: empty" in repr(samples)
    np.testing.assert_array_equal(pickle.loads(pickle.dumps(samples)).spins, spins)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ([1, -1], r"shape \(n_shots, n_sites\).*got shape \(2,\)"),
        (np.zeros((0, 3)), r"got shape \(0, 3\)"),
        (np.zeros((3, 0)), r"got shape \(3, 0\)"),
        ([[1, -1], [1, 0]], r"got 0 in shot 1, site 1 \(bits b are spins 1 - 2 b\)"),
        ([[1, np.nan]], "got nan in shot 0, site 1"),
        ([[1, 257]], "got 257 in shot 0"),
        ([["1"]], "spins must be numbers"),
        ([[True]], "spins must be numbers"),
    ],
)
def test_bad_spins(values: object, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Samples(values)  # type: ignore[arg-type]


def test_bad_groups_and_manifests(spins: np.ndarray) -> None:
    with pytest.raises(InputError, match=r"groups must have shape \(40,\); got shape \(3,\)"):
        Samples(spins, groups=[1, 2, 3])
    with pytest.raises(InputError, match="groups must be whole numbers; got 0.5"):
        Samples(spins, groups=np.full(40, 0.5))
    with pytest.raises(InputError, match="the manifest speaks of 3 sites; the samples have 5"):
        Samples(spins, Manifest(sites=[1, 2, 3]))


def test_moments_are_means(spins: np.ndarray) -> None:
    moments = Samples(spins).moments()
    np.testing.assert_allclose(moments.z.value, spins.mean(axis=0))
    np.testing.assert_allclose(moments.zz.value, spins.T @ spins.astype(float) / 40)
    assert (moments.zz.num == 0).all()
    assert moments.x is None
    shrunk = 40 / 44 * moments.z.value
    np.testing.assert_allclose(moments.z.stat, np.sqrt((1 - shrunk**2) / 39))


@given(st.lists(st.sampled_from([1, -1]), min_size=5, max_size=5), st.permutations(range(5)))
def test_gauge_and_order_are_undone(instance: Instance, spins: np.ndarray, gauge: list[int], order: list[int]) -> None:
    """A device with its own order of sites and a gauge gives the same energies once paired with the instance."""
    labels = instance.lattice.labels[order]
    device = spins[:, order] * np.array(gauge)
    raw = Samples(device, Manifest(instance.identity, 7, gauge, sites=labels, batch=1))
    with pytest.raises(InputError, match="gauge of these samples has not been undone"):
        raw.moments()
    with pytest.raises(InputError, match="gauge of these samples has not been undone"):
        raw.estimate(q2)
    paired = raw.for_instance(instance, duration=7)
    np.testing.assert_array_equal(paired.spins, spins)
    np.testing.assert_array_equal(paired.manifest.sites, instance.lattice.labels)
    again = paired.for_instance(instance)
    np.testing.assert_array_equal(again.spins, spins)
    assert paired.manifest.batch == 1


def test_a_gauge_leaves_energies_alone(instance: Instance, spins: np.ndarray) -> None:
    """The programmed instance in its own spins has the energies of the meant one after undoing the gauge."""
    gauge = np.array([1, -1, -1, 1, -1])
    programmed = instance.gauge(gauge)
    raw = Samples(spins, Manifest(instance.identity, gauge=gauge))
    energies = instance.energies(raw.for_instance(instance).spins)
    np.testing.assert_allclose(energies, programmed.energies(spins))
    assert not np.allclose(instance.energies(spins), energies)


def test_mispaired_samples_are_refused(instance: Instance, spins: np.ndarray) -> None:
    other = Instance(instance.lattice, -instance.couplings, instance.fields)
    with pytest.raises(InputError, match="samples of another instance: manifest .*pair the file with its own instance"):
        Samples(spins, Manifest(other.identity)).for_instance(instance)
    with pytest.raises(InputError, match="samples of another instance"):
        Samples(spins[:, :4], Manifest(other.identity, gauge=[1, -1, 1, 1])).for_instance(instance)
    gauge = [1, -1, 1, 1, 1]
    with pytest.raises(InputError, match="the manifest must name it before the gauge"):
        Samples(spins, Manifest(instance.gauge(gauge).identity, gauge=gauge)).for_instance(instance)
    with pytest.raises(InputError, match="their duration is 7, not 1"):
        Samples(spins, Manifest(duration=7)).for_instance(instance, duration=1)
    with pytest.raises(InputError, match="samples of 4 spins do not fit an instance of 5"):
        Samples(spins[:, :4]).for_instance(instance)
    with pytest.raises(InputError, match=r"the samples lack 4, 5; the lattice has no 2, 8 \(select"):
        Samples(spins, Manifest(sites=[0, 1, 2, 3, 8])).for_instance(instance)
    with pytest.raises(InputError, match="the samples lack 5$"):
        Samples(spins[:, :4], Manifest(sites=[0, 1, 3, 4])).for_instance(instance)


def test_select_takes_columns_with_their_gauge(spins: np.ndarray) -> None:
    samples = Samples(spins, Manifest(sites=[9, 7, 5, 3, 1], gauge=[1, -1, 1, -1, 1]))
    chosen = samples.select([1, 7])
    np.testing.assert_array_equal(chosen.spins, spins[:, [4, 1]])
    assert chosen.manifest.to_dict() == {"sites": [1, 7], "gauge": [1, -1]}
    assert Samples(spins).select([4, 0]).manifest.to_dict() == {}
    with pytest.raises(InputError, match="the samples have no site 2; they have 9, 7, 5, 3, 1"):
        samples.select([2])


def test_concatenation_groups_by_gauge(spins: np.ndarray) -> None:
    gauges = [[1, 1, 1, 1, 1], [1, -1, 1, 1, 1], [1, 1, 1, 1, 1]]
    runs = [Samples(spins * g, Manifest(gauge=g, batch=k, source="s")) for k, g in enumerate(gauges)]
    joined = Samples.concatenate(runs)
    np.testing.assert_array_equal(joined.spins, np.concatenate([spins] * 3))
    assert joined.groups is not None
    np.testing.assert_array_equal(joined.groups, np.repeat([0, 1, 0], 40))
    assert joined.manifest.to_dict() == {"source": "s"}
    # gauges undone beforehand are known all the same
    paired = Samples.concatenate([run.ungauged() for run in runs])
    np.testing.assert_array_equal(paired.groups, joined.groups)
    same = Samples.concatenate([runs[0], runs[2]])
    assert same.manifest.undone
    assert same.n_groups == 1


def test_concatenation_groups_by_batch_else_by_run(spins: np.ndarray) -> None:
    by_batch = Samples.concatenate([Samples(spins, Manifest(batch=b)) for b in (4, 5, 4)])
    assert by_batch.groups is not None
    np.testing.assert_array_equal(by_batch.groups, np.repeat([0, 1, 0], 40))
    by_run = Samples.concatenate([Samples(spins), Samples(spins)])
    assert by_run.n_groups == 2
    assert Samples.concatenate([Samples(spins)]).groups is None
    kept = Samples.concatenate([by_run, by_batch, Samples(spins)])
    assert kept.n_groups == 5


def test_runs_without_a_gauge_among_runs_with_one_are_named(spins: np.ndarray) -> None:
    gauged = [Samples(spins, Manifest(gauge=[1, -1, 1, 1, g], batch=1)) for g in (1, -1)]
    with pytest.warns(AnnealRefWarning, match=r"2 of 4 runs give a gauge and 2 do not \(run 2, run 3\).*all \+1"):
        joined = Samples.concatenate([*gauged, Samples(spins), Samples(spins, Manifest(batch=2))])
    assert joined.n_groups == 4
    with pytest.warns(AnnealRefWarning, match=r"1 of 2 runs give a batch and 1 do not \(run 0\)"):
        Samples.concatenate([Samples(spins), Samples(spins, Manifest(batch=2))])
    # alike, or with groups of their own: pytest turns a warning into an error
    Samples.concatenate([*gauged, Samples(spins, groups=np.arange(40))])
    Samples.concatenate([Samples(spins), Samples(spins)])


def test_runs_that_do_not_belong_together(spins: np.ndarray) -> None:
    with pytest.raises(InputError, match="takes at least one run"):
        Samples.concatenate([])
    with pytest.raises(InputError, match="run 0 has 5, run 1 has 4"):
        Samples.concatenate([Samples(spins), Samples(spins[:, :4])])
    with pytest.raises(InputError, match="runs must agree in duration; run 0 has 7.0, run 1 has None"):
        Samples.concatenate([Samples(spins, Manifest(duration=7)), Samples(spins)])


def test_resampling_is_seeded(spins: np.ndarray) -> None:
    samples = Samples(spins, Manifest(duration=7), groups=np.arange(40))
    drawn = samples.sample(100, seed=3)
    assert drawn.n_shots == 100
    assert drawn.groups is not None
    np.testing.assert_array_equal(drawn.spins, spins[drawn.groups])
    np.testing.assert_array_equal(samples.sample(100, seed=3).spins, drawn.spins)
    assert not np.array_equal(samples.sample(100, seed=4).spins, drawn.spins)
    assert samples.sample(1, seed=0).n_shots == 1
    for shots, seed, message in ((0, 1, "shots must be a whole number of at least 1"), (5, -1, "seed must be")):
        with pytest.raises(InputError, match=message):
            samples.sample(shots, seed)


def test_grouped_estimate_of_an_energy(instance: Instance, spins: np.ndarray) -> None:
    """For a linear function the delete-a-group error is the scatter of the group means, whatever their sizes."""
    groups = np.repeat(np.arange(4), [5, 10, 10, 15])
    with pytest.warns(AnnealRefWarning, match="only 4 groups"):
        estimate = Samples(spins, groups=groups).estimate(lambda m: problem_energy(m, instance))
    energies = instance.energies(spins)
    means = np.array([energies[groups == g].mean() for g in range(4)])
    share = np.bincount(groups) / 40
    assert estimate.value == pytest.approx(energies.mean())
    expected = np.sum(share / (1 - share) * (means - energies.mean()) ** 2) / 4
    assert estimate.stat == pytest.approx(np.sqrt(expected))
