from __future__ import annotations

import pickle
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

import anneal_ref as ar
from anneal_ref.base.errors import InputError
from anneal_ref.judgement.compare import compare
from anneal_ref.judgement.comparison import Comparison
from anneal_ref.judgement.equivalence import Acceptance
from anneal_ref.judgement.fidelity import Fidelity, Refusal
from anneal_ref.judgement.pooling import disorder_error, pool
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.samples import Samples
from anneal_ref.truth.reference import Reference, reference

SCHEDULE = ar.Schedule.linear(transverse=(12.0, 0.0), problem=(0.0, 6.0))
LATTICE = ar.lattices.square(2, 4)
NAMES = ["correlation_error", "residual_energy", "order_parameter", "magnetisation_error", "fidelity", "log_likelihood"]


def solved(instance: ar.Instance, duration: float = 0.7) -> Reference:
    return reference(ar.Anneal(instance, SCHEDULE, duration=duration), samples=4096)


@pytest.fixture(scope="module")
def plain() -> Reference:
    return solved(ar.draw_instance(LATTICE, ar.disorder.plus_minus(), seed=3))


@pytest.fixture(scope="module")
def with_fields() -> Reference:
    return solved(ar.draw_instance(LATTICE, ar.disorder.plus_minus(), fields=ar.disorder.gaussian(0.5), seed=3))


def rescaled(truth: Reference, factors: np.ndarray) -> Reference:
    """Truth of the processor whose couplings are off by these factors."""
    instance = truth.anneal.instance
    return solved(ar.Instance(instance.lattice, instance.couplings * factors, instance.fields))


def as_if_meant(samples: Samples) -> Samples:
    """Samples of a processor that believes it ran the right instance."""
    return Samples(samples.spins)


def test_a_perfect_processor(plain: Reference) -> None:
    result = compare(plain, plain.sample(4000, seed=1), Acceptance(0.15, 0.1, 0.1))
    assert list(result.scores) == NAMES
    assert result.verdict == "accept"
    assert result.correlation_error.low == 0.0
    assert result.pairs.significant() == 0
    assert all(abs(sigma) < 4 for sigma in result.sigma.values())
    assert set(result.sigma) == {"residual_energy", "order_parameter", "log_likelihood"} == set(result.truth)
    for name in ("residual_energy", "order_parameter", "fidelity", "log_likelihood"):
        score = result.scores[name]
        assert score.floor is not None
        assert abs(score.value - float(score.floor)) < 5 * float(score.floor.stat)
    assert isinstance(result.fidelity, Fidelity)
    assert abs(result.fidelity.plain - float(result.fidelity.plain_floor)) < 5 * float(result.fidelity.plain_floor.stat)
    assert str(result).count("plain, shot noise included") == 2
    assert result.correlation_error.floor is not None
    assert 0 < float(result.correlation_error.floor) < result.floor.raw_quantile


def test_true_values_are_those_of_the_reference(plain: Reference) -> None:
    result = compare(plain, plain.sample(500, seed=2))
    zz = plain.moments().zz.value
    upper = np.triu_indices(plain.n_sites, 1)
    assert float(result.truth["order_parameter"]) == pytest.approx(np.mean(zz[upper] ** 2))
    instance = plain.anneal.instance
    i, j = instance.lattice.edges.T
    energy = (np.sum(instance.couplings * zz[i, j]) - plain.ground.value) / instance.n_sites
    assert float(result.truth["residual_energy"]) == pytest.approx(energy)
    assert float(result.truth["residual_energy"].num) > 0
    p = plain.probabilities()
    assert p is not None
    entropy = -np.sum(p[p > 0] * np.log(p[p > 0]))
    assert float(result.truth["log_likelihood"]) == pytest.approx(-entropy, abs=1e-3)


def test_measured_values_are_unbiased_and_their_errors_right(plain: Reference) -> None:
    found = [compare(plain, plain.sample(150, seed=k)) for k in range(100)]
    limit = stats.norm.isf(0.5e-4) / np.sqrt(len(found))
    for name in ("residual_energy", "order_parameter"):
        values = np.array([one.scores[name].value for one in found])
        errors = np.array([float(one.scores[name].estimate.stat) for one in found])
        assert abs(values.mean() - float(found[0].truth[name])) < limit * values.std()
        assert np.sqrt(np.mean(errors**2)) == pytest.approx(values.std(), rel=0.25)
        floor = found[0].scores[name].floor
        assert floor is not None
        assert float(floor.stat) == pytest.approx(values.std(), rel=0.25)
        inside = sum(one.scores[name].low <= float(one.truth[name]) <= one.scores[name].high for one in found)
        assert inside >= stats.binom.ppf(1e-4, len(found), 0.93)
    above = sum(one.correlation_error.value > float(one.correlation_error.floor or 0) for one in found)
    assert above <= stats.binom.isf(1e-4, len(found), 0.06)
    strays = sum(one.scores["magnetisation_error"].low > 0 for one in found)
    assert strays <= stats.binom.isf(1e-4, len(found), 0.05)


def test_a_scale_error_and_a_wrong_coupler_are_found(plain: Reference) -> None:
    m = LATTICE.n_edges if hasattr(LATTICE, "n_edges") else len(LATTICE.edges)
    scale = compare(plain, as_if_meant(rescaled(plain, np.full(m, 0.85)).sample(20_000, seed=4)), Acceptance(0.02))
    assert scale.verdict == "reject"
    assert scale.correlation_error.low > 0.02
    factors = np.ones(m)
    factors[4] = 0.5
    coupler = compare(plain, as_if_meant(rescaled(plain, factors).sample(8000, seed=5)))
    assert coupler.pairs.significant() > 0
    assert {int(coupler.pairs.first[0]), int(coupler.pairs.second[0])} == set(LATTICE.edges[4].tolist())
    assert coupler.sigma["log_likelihood"] < -5
    assert any("beyond doubt" in note for note in coupler.notes)
    assert not any("beyond doubt" in note for note in compare(plain, plain.sample(4000, seed=1)).notes)


def test_readout_flips_of_one_spin_are_found(plain: Reference) -> None:
    spins = plain.sample(5000, seed=6).spins.copy()
    spins[np.random.default_rng(1).random(5000) < 0.06, 2] *= -1
    result = compare(plain, Samples(spins))
    assert int(np.argmax(result.pairs.site_sigma())) == 2
    assert result.pairs.site_gain()[2] == pytest.approx(0.88, abs=0.06)
    assert "sites most involved: 2 (" in str(result)


def test_a_biased_readout_shows_in_the_magnetisation(plain: Reference) -> None:
    spins = plain.sample(5000, seed=7).spins.copy()
    spins[np.random.default_rng(2).random(spins.shape) < 0.04 * (spins > 0)] *= -1
    score = compare(plain, Samples(spins)).scores["magnetisation_error"]
    assert score.low < 0.04 < score.high
    assert score.low > 0


def test_fields_score_connected_correlations(with_fields: Reference) -> None:
    result = compare(with_fields, with_fields.sample(3000, seed=9))
    moments = with_fields.moments()
    connected = moments.zz.value - np.outer(moments.z.value, moments.z.value)
    upper = np.triu_indices(with_fields.n_sites, 1)
    assert result.correlation.truth_squares == pytest.approx(np.sum(connected[upper] ** 2))
    assert result.floor.truth_squares == pytest.approx(result.correlation.truth_squares, rel=1e-4)
    assert any("<Z> is judged apart" in note for note in result.notes)
    assert result.correlation_error.low == 0.0
    # the wrong twin, plain correlations, has another denominator
    assert result.correlation.truth_squares < 0.95 * np.sum(moments.zz.value[upper] ** 2)


def test_connected_correlations_of_rare_events_carry_a_warning(with_fields: Reference) -> None:
    assert not any("rare events" in note for note in compare(with_fields, with_fields.sample(300, seed=1)).notes)
    lattice = ar.lattices.square(2, 2)
    pinned = solved(ar.Instance(lattice, np.full(len(lattice.edges), -1.0), fields=np.full(4, -0.5)), duration=8.0)
    p = pinned.probabilities()
    assert p is not None
    assert 200 * (1 - p.max()) < 10
    assert any("rare events" in note for note in compare(pinned, pinned.sample(200, seed=1)).notes)


def test_gauge_is_undone_and_groups_count(plain: Reference) -> None:
    rng, instance = np.random.default_rng(9), plain.anneal.instance
    runs = []
    for k in range(10):
        gauge = rng.choice([-1, 1], instance.n_sites)
        manifest = Manifest(instance=instance.identity, duration=0.7, gauge=gauge)
        runs.append(Samples(plain.sample(300, seed=100 + k).spins * gauge, manifest))
    result = compare(plain, Samples.concatenate(runs), Acceptance(0.3))
    assert (result.n_shots, result.n_clusters) == (3000, 10)
    assert result.verdict == "accept"
    assert "3000 shots in 10 gauges" in str(result)
    few = compare(plain, Samples.concatenate(runs[:3]))
    assert any("only 3 gauges" in note for note in few.notes)
    one = compare(plain, Samples(plain.sample(300, seed=1).spins, groups=np.zeros(300)))
    assert any("one gauge or batch" in note for note in one.notes)
    assert any("one gauge or batch" in note for note in compare(plain, runs[0]).notes)


def test_without_a_table_of_probabilities(plain: Reference) -> None:
    bare = replace(plain, folded=None)
    samples = plain.sample(2000, seed=10)
    full, less = compare(plain, samples), compare(bare, samples)
    assert list(less.scores) == NAMES[:4]
    assert [note for note in less.notes if note.startswith("no ")] != []
    assert isinstance(less.fidelity, Refusal)
    assert less.fidelity.short == "no table"
    assert less.correlation_error.value == full.correlation_error.value
    assert float(less.correlation_error.floor or 0) == pytest.approx(float(full.correlation_error.floor or 0), rel=0.25)
    asked = compare(bare, samples, likelihood=True).scores["log_likelihood"]
    assert asked.value == pytest.approx(full.scores["log_likelihood"].value, abs=1e-5)
    assert asked.floor is not None
    assert abs(float(asked.floor) - float(full.truth["log_likelihood"])) < 5 * float(asked.floor.stat)


def test_too_few_shots_for_a_fidelity_say_so(plain: Reference) -> None:
    result = compare(plain, plain.sample(20, seed=11))
    assert "fidelity" not in result.scores
    assert isinstance(result.fidelity, Refusal)
    assert result.fidelity.short == "too few shots"
    assert "do not support a fidelity" in result.fidelity.reason
    assert result.fidelity.reason in str(result)


def test_samples_that_are_too_good_are_noticed(plain: Reference) -> None:
    p = plain.probabilities()
    assert p is not None
    counts = np.round(p * 4000).astype(int)
    index = np.repeat(np.arange(len(p)), counts)
    spins = 1 - 2 * ((index[:, None] >> np.arange(plain.n_sites)) & 1)
    assert any("better than independent shots" in note for note in compare(plain, Samples(spins)).notes)
    assert not any("better than" in note for note in compare(plain, plain.sample(4000, seed=12)).notes)


def test_mispaired_samples_are_refused(plain: Reference, with_fields: Reference) -> None:
    with pytest.raises(InputError, match="another instance"):
        compare(plain, with_fields.sample(100, seed=1))
    with pytest.raises(InputError, match="duration"):
        compare(plain, Samples(plain.sample(100, seed=1).spins, Manifest(duration=5.0)))
    with pytest.raises(InputError, match="spins do not fit"):
        compare(plain, Samples(np.ones((10, 3))))
    with pytest.raises(InputError, match="at least 2 shots"):
        compare(plain, plain.sample(1, seed=1))
    with pytest.raises(InputError, match="level"):
        compare(plain, plain.sample(10, seed=1), level=1.0)


def test_same_seed_same_answer(plain: Reference) -> None:
    samples = plain.sample(500, seed=13)
    texts = {str(compare(plain, samples, seed=seed)) for seed in (1, 1)}
    assert len(texts) == 1
    assert compare(plain, samples, seed=2).floor.raw_mean != compare(plain, samples, seed=1).floor.raw_mean


def test_a_comparison_survives_a_pickle(plain: Reference) -> None:
    result = compare(plain, plain.sample(300, seed=15), Acceptance(0.1))
    again = pickle.loads(pickle.dumps(result))
    assert str(again) == str(result)
    assert pool([again]).score.value == pool([result]).score.value


def test_the_table_is_readable(plain: Reference) -> None:
    result = compare(plain, plain.sample(300, seed=14), Acceptance(0.05, order_parameter=0.2))
    text = str(result)
    assert all(len(line) < 200 for line in text.splitlines())
    for words in (
        "J per spin",
        "nats per shot",
        "perfect processor",
        "adjusted p",
        "verdict: inconclusive",
        "more shots",
    ):
        assert words in text
    assert repr(result).startswith("<Comparison: 8 spins, 300 shots")


@pytest.mark.slow
def test_at_the_limit_of_a_planted_error_wrong_verdicts_are_rare(plain: Reference) -> None:
    processor = rescaled(plain, np.full(len(LATTICE.edges), 0.8))
    upper = np.triu_indices(plain.n_sites, 1)
    t, c = plain.moments().zz.value[upper], processor.moments().zz.value[upper]
    acceptance = Acceptance(float(np.linalg.norm(c - t) / np.linalg.norm(t)))
    found = [compare(plain, as_if_meant(processor.sample(1000, seed=k)), acceptance).verdict for k in range(200)]
    assert max(found.count("accept"), found.count("reject")) <= stats.binom.isf(1e-4, 200, 0.05)


# ---- pooling ----


@pytest.fixture(scope="module")
def ensemble() -> list[Reference]:
    return [
        solved(ar.draw_instance(ar.lattices.square(2, 3), ar.disorder.gaussian(), seed=5, index=k)) for k in range(6)
    ]


def compared(ensemble: list[Reference], shots: int, seed: int) -> list[Comparison]:
    return [compare(truth, truth.sample(shots, seed=1000 * seed + k)) for k, truth in enumerate(ensemble)]


def test_pooled_error_is_the_ratio_of_summed_squares(ensemble: list[Reference]) -> None:
    parts = compared(ensemble, 500, 1)
    pooled = pool(parts, Acceptance(0.2))
    ratio = sum(p.correlation.distance.value for p in parts) / sum(p.correlation.truth_squares for p in parts)
    assert np.sign(pooled.score.value) * pooled.score.value**2 == pytest.approx(ratio)
    assert (pooled.n_instances, pooled.n_comparisons, pooled.n_shots) == (6, 6, 3000)
    assert pooled.verdict == "accept"
    assert pooled.score.high < min(p.correlation_error.high for p in parts)
    assert pooled.floor.raw_mean == pytest.approx(
        np.sqrt(np.mean([p.floor.raw.mean() for p in parts]) * 6 / pooled.correlation.truth_squares)
    )
    assert "disorder" in str(pooled)
    assert pool(parts[:1]).score.disorder is None
    with pytest.raises(InputError, match="at least one"):
        pool([])
    with pytest.raises(InputError, match="twice"):
        pool([parts[0], parts[0]])


@pytest.mark.slow
def test_pooled_perfect_processors_are_covered(ensemble: list[Reference]) -> None:
    low = sum(pool(compared(ensemble, 200, seed)).score.low > 0 for seed in range(60))
    assert low <= stats.binom.isf(1e-4, 60, 0.05)


def test_disorder_error_is_kept_apart_from_the_shot_error(ensemble: list[Reference]) -> None:
    """Only one of six instances is off: the scatter between instances is much larger than shots explain."""
    parts = compared(ensemble, 2000, 2)
    off = rescaled(ensemble[0], np.full(len(ensemble[0].anneal.instance.couplings), 0.5))
    parts[0] = compare(ensemble[0], as_if_meant(off.sample(2000, seed=3)))
    even, uneven = pool(compared(ensemble, 2000, 4)).score, pool(parts).score
    assert even.disorder is not None
    assert uneven.disorder is not None
    assert uneven.disorder > 3 * float(uneven.estimate.stat)
    assert even.disorder < uneven.disorder
    errors = [part.correlation for part in parts]
    assert disorder_error(errors) == pytest.approx(uneven.disorder)
    assert disorder_error(errors[:1]) is None


def test_two_durations_of_one_instance_are_one_draw_of_disorder(ensemble: list[Reference]) -> None:
    other = solved(ensemble[0].anneal.instance, duration=1.5)
    parts = [*compared(ensemble, 300, 5), compare(other, other.sample(300, seed=6))]
    assert (pool(parts).n_instances, pool(parts).n_comparisons) == (6, 7)


def test_pairs_and_sites_are_named_as_on_the_device() -> None:
    lattice = ar.lattices.square(3, 3).diluted(dead=[0])
    truth = solved(ar.draw_instance(lattice, ar.disorder.plus_minus(), seed=3))
    spins = truth.sample(5000, seed=7).spins.copy()
    spins[np.random.default_rng(2).random(5000) < 0.3, 7] *= -1
    text = str(compare(truth, Samples(spins)))
    assert lattice.labels[7] == 8
    assert "sites most involved: 8 (" in text
    assert "-8 " in text


def test_one_pair_names_no_site() -> None:
    lattice = ar.lattices.from_edges(4, [[0, 1], [2, 3]])
    truth = solved(ar.Instance(lattice, np.array([1.0, -1.0])))
    spins = truth.sample(5000, seed=7).spins.copy()
    spins[np.random.default_rng(2).random(5000) < 0.2, 0] *= -1
    result = compare(truth, Samples(spins))
    assert result.pairs.significant() == 1
    assert "sites most involved" not in str(result)


def test_spins_without_their_wrapper_are_refused(plain: Reference) -> None:
    with pytest.raises(InputError, match=r"got ndarray; wrap .* anneal_ref.Samples\(spins\)"):
        compare(plain, plain.sample(100, seed=1).spins)  # type: ignore[arg-type]


def test_a_truth_short_of_its_tolerance_says_by_how_much(plain: Reference) -> None:
    strict = replace(plain, tolerance=plain.error / 10)
    note = next(note for note in compare(strict, plain.sample(300, seed=1)).notes if "the truth was asked" in note)
    assert f"within {plain.error / 10:.2g} and reached {plain.error:.2g}" in note
