"""Disorder laws: frozen values, distributions, independence, bad input."""

import itertools
import pickle

import numpy as np
import pytest
from scipy import special, stats

from anneal_ref import disorder
from anneal_ref.base.errors import InputError
from anneal_ref.model.normal import standard_normal
from anneal_ref.model.words import raw_words

LAWS = [
    disorder.plus_minus(),
    disorder.gaussian(0.7),
    disorder.uniform(-0.5, 2.0),
    disorder.levels(4),
    disorder.levels(3, zero=True),
    disorder.constant(-1.5),
]
FROZEN = [
    (disorder.plus_minus(), "couplings", [-1, 1, 1, 1, 1, -1]),
    (disorder.plus_minus(), "fields", [-1, -1, 1, 1, -1, -1]),
    (disorder.gaussian(), "couplings", [-4898853645, 2064511977, 1516415544, 1353236672, 876238667, -6946030324]),
    (disorder.gaussian(), "fields", [-2215667237, -2779682912, 1973205277, 622407697, -4284762553, -4287346824]),
    (disorder.levels(3), "couplings", [-3, 2, 1, 1, 1, -3]),
    (disorder.levels(3, zero=True), "fields", [-1, -2, 1, 0, -2, -2]),
]
UNITS = {"PlusMinus": 1.0, "Gaussian": 2.0**32, "Levels": 3.0}
DRAWS = 100_000


@pytest.mark.parametrize(("law", "stream", "expected"), FROZEN, ids=lambda x: str(x) if not isinstance(x, list) else "")
def test_values_are_frozen(law, stream, expected):
    """These numbers define the laws: they must never change."""
    drawn = law.draw(6, seed=11, index=0, stream=stream)
    assert drawn.tolist() == [value / UNITS[type(law).__name__] for value in expected]


def test_uniform_values_are_frozen():
    drawn = disorder.uniform(0, 1).draw(3, seed=11, index=0, stream="couplings")
    assert (drawn * 2**53).tolist() == [1144072225643524, 6166586336925013, 5746424433702240]


def test_uniform_never_reaches_its_upper_end():
    """Half of all draws from [1, 1 + 2 ulp) would round to an end or the middle; the upper end is not in the law."""
    ulp = np.spacing(1.0)
    drawn = disorder.uniform(1.0, 1.0 + 2 * ulp).draw(1000, seed=1, index=0, stream="couplings")
    assert sorted(set(drawn.tolist())) == [1.0, 1.0 + ulp]
    assert (disorder.uniform(0.0, 1e308).draw(1000, seed=1, index=0, stream="couplings") < 1e308).all()


@pytest.mark.parametrize("law", LAWS, ids=str)
def test_draws_are_reproducible_and_nested(law):
    long = law.draw(50, 3, 9, "fields")
    assert long.dtype == np.float64
    assert long.shape == (50,)
    assert np.array_equal(long, law.draw(50, 3, 9, "fields"))
    assert np.array_equal(long[:20], law.draw(20, 3, 9, "fields"))
    assert law.draw(0, 3, 9, "fields").shape == (0,)


@pytest.mark.parametrize("law", LAWS, ids=str)
def test_laws_are_values(law):
    again = pickle.loads(pickle.dumps(law))
    assert again == law
    assert hash(again) == hash(law)
    assert eval(repr(law), dict(vars(disorder))) == law
    with pytest.raises((AttributeError, TypeError)):
        law.anything = 1


def test_normal_is_the_inverse_of_the_distribution():
    """Against `scipy.special.ndtri` (Cephes), to half a step of the grid."""
    words = np.concatenate([raw_words(20_000, 1, 0, "fields"), np.uint64(1) << np.arange(11, 64, dtype=np.uint64)])
    drawn = standard_normal(words)
    probability = ((words >> np.uint64(11)).astype(float) + 0.5) * 2.0**-53
    assert np.abs(drawn - special.ndtri(probability)).max() < 0.5001 * 2.0**-32
    assert np.array_equal(drawn * 2**32, np.round(drawn * 2**32))


def test_normal_is_odd_and_finite_at_the_ends():
    words = raw_words(1000, 2, 0, "fields")
    assert np.array_equal(standard_normal(~words), -standard_normal(words))
    ends = standard_normal(np.array([0, 2**64 - 1], dtype=np.uint64))
    assert ends.tolist() == pytest.approx([special.ndtri(2.0**-54), -special.ndtri(2.0**-54)], abs=2.0**-32)


@pytest.mark.parametrize(("law", "peer"), [(LAWS[1], stats.norm(0, 0.7)), (LAWS[2], stats.uniform(-0.5, 2.5))])
def test_continuous_distributions(law, peer):
    drawn = law.draw(DRAWS, seed=4, index=2, stream="couplings")
    assert stats.kstest(drawn, peer.cdf).pvalue > 1e-4
    assert stats.kstest(drawn * 1.03, peer.cdf).pvalue < 1e-4, "the test has no power"


@pytest.mark.parametrize(
    ("law", "values"),
    [
        (LAWS[0], [-1, 1]),
        (LAWS[3], [-1, -0.75, -0.5, -0.25, 0.25, 0.5, 0.75, 1]),
        (LAWS[4], [-1, -2 / 3, -1 / 3, 0, 1 / 3, 2 / 3, 1]),
    ],
)
def test_discrete_distributions(law, values):
    found, counts = np.unique(law.draw(DRAWS, seed=4, index=2, stream="couplings"), return_counts=True)
    assert found.tolist() == values
    assert stats.chisquare(counts).pvalue > 1e-4


def test_streams_members_and_seeds_are_uncorrelated():
    law = disorder.gaussian()
    keys = list(itertools.product((0, 1), (0, 1), ("couplings", "fields", "transverse")))
    draws = np.array([law.draw(8_000, seed, index, stream) for seed, index, stream in keys])
    off = np.corrcoef(draws)[np.triu_indices(len(keys), 1)]
    limit = stats.norm.isf(0.5e-4 / len(off)) / np.sqrt(8_000)
    assert np.abs(off).max() < limit


def test_neighbouring_words_are_uncorrelated():
    drawn = disorder.plus_minus().draw(DRAWS, 0, 0, "couplings")
    agreeing = int((drawn[1:] == drawn[:-1]).sum())
    assert stats.binomtest(agreeing, DRAWS - 1).pvalue > 1e-4


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: disorder.gaussian(0), "sigma must be a positive number; got 0"),
        (lambda: disorder.gaussian(np.nan), "sigma must be a positive number; got nan"),
        (lambda: disorder.uniform(1, 1), "low must be below high; got 1.0 and 1.0; use constant"),
        (lambda: disorder.uniform(0, np.inf), "high must be a finite number; got inf"),
        (lambda: disorder.uniform(-1e308, 1e308), "high - low must be a finite number; got -1e\\+308 and 1e\\+308"),
        (lambda: disorder.levels(0), "k must be a whole number from 1 to 1048576; got 0"),
        (lambda: disorder.levels(2.5), "k must be a whole number from 1 to 1048576; got 2.5"),
        (lambda: disorder.levels(2, zero=1), "zero must be True or False; got 1"),
        (lambda: disorder.constant("x"), "value must be a finite number; got 'x'"),
    ],
)
def test_bad_parameters(make, message):
    with pytest.raises(InputError, match=message):
        make()
