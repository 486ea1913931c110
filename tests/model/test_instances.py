"""Instances: energies by brute force, symmetries, identity, files, draws, and what is refused."""

import json
import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import anneal_ref as ar
from anneal_ref import disorder, lattices
from anneal_ref.base.errors import InputError


def an_instance(seed=3, n=8, extra=6):
    generator = np.random.default_rng(seed)
    pairs = [(i, j) for i in range(n) for j in range(i)]
    chosen = generator.permutation(len(pairs))[: n + extra]
    lattice = lattices.from_edges(n, [pairs[k] for k in chosen], generator.normal(size=(n, 2)))
    return ar.Instance(
        lattice,
        generator.normal(size=len(chosen)),
        generator.normal(size=n),
        generator.uniform(0.5, 1.5, n),
        "an instance",
    )


def configurations(n):
    return 1 - 2 * ((np.arange(2**n)[:, None] >> np.arange(n)) & 1)


def slow_energy(instance, z):
    bonds = sum(J * z[i] * z[j] for (i, j), J in zip(instance.lattice.edges, instance.couplings, strict=True))
    return bonds + sum(h * z[i] for i, h in enumerate(instance.fields))


def test_energies_are_the_definition():
    instance = an_instance()
    spins = configurations(8)
    expected = [slow_energy(instance, z) for z in spins]
    assert np.allclose(instance.energies(spins), expected, rtol=0, atol=1e-12)


def test_energies_shapes():
    instance = an_instance()
    spins = configurations(8).reshape(16, 16, 8)
    assert instance.energies(spins).shape == (16, 16)
    assert instance.energies(spins[0, 0]).shape == ()
    assert instance.energies(spins.astype(np.int8))[3, 2] == instance.energies(spins[3, 2].tolist())
    assert instance.energies(np.empty((0, 8))).shape == (0,)


def test_antiferromagnet_has_positive_couplings():
    pair = ar.Instance(lattices.chain(2), [1.0])
    assert pair.energies([[1, 1], [1, -1]]).tolist() == [1.0, -1.0]


def test_defaults():
    instance = ar.Instance(lattices.chain(3), [1, -1])
    assert instance.fields.tolist() == [0, 0, 0]
    assert instance.transverse.tolist() == [1, 1, 1]
    assert not instance.has_fields
    assert instance.name == "chain 3"
    assert ar.Instance(lattices.chain(3), [1, -1], fields=[0, 1e-300, 0]).has_fields
    assert ar.Instance(lattices.chain(1), []).energies([[1], [-1]]).tolist() == [0, 0]


def test_coupling_matrix():
    instance = an_instance()
    matrix = instance.coupling_matrix()
    assert np.array_equal(matrix, matrix.T)
    assert not matrix.diagonal().any()
    i, j = instance.lattice.edges.T
    assert np.array_equal(matrix[j, i], instance.couplings)
    assert np.count_nonzero(matrix) == 2 * instance.n_edges


@given(st.integers(0, 10**6), st.integers(0, 255))
def test_gauge_keeps_energies(seed, word):
    instance, spins = an_instance(seed), configurations(8)
    g = spins[word]
    gauged = instance.gauge(g)
    assert np.allclose(gauged.energies(spins * g), instance.energies(spins), rtol=0, atol=1e-12)
    assert gauged.gauge(g).identity == instance.identity
    assert np.array_equal(gauged.transverse, instance.transverse)
    assert (gauged.identity == instance.identity) == (word == 0)


@given(st.permutations(range(8)))
def test_relabelling_keeps_energies(order):
    instance, spins = an_instance(), configurations(8)
    relabelled = instance.relabelled(order)
    assert np.allclose(relabelled.energies(spins[:, order]), instance.energies(spins), rtol=0, atol=1e-12)
    assert relabelled.lattice.labels.tolist() == list(order)
    assert np.array_equal(relabelled.lattice.coordinates, instance.lattice.coordinates[list(order)])
    assert np.array_equal(relabelled.transverse, instance.transverse[list(order)])
    assert np.array_equal(relabelled.couplings, instance.couplings)
    assert relabelled.relabelled(np.argsort(order)).identity == instance.identity
    assert (relabelled.identity == instance.identity) == (list(order) == list(range(8)))


# identity


@given(st.permutations(range(14)), st.lists(st.booleans(), min_size=14, max_size=14))
def test_identity_ignores_order_and_direction_of_edges(order, flips):
    instance = an_instance()
    edges = instance.lattice.edges[list(order)]
    edges = np.where(np.array(flips)[:, None], edges[:, ::-1], edges)
    other = ar.Instance(
        lattices.from_edges(8, edges, name="other"),
        instance.couplings[list(order)],
        instance.fields,
        instance.transverse,
    )
    assert other.identity == instance.identity


def test_identity_ignores_zero_couplings_and_minus_zero():
    plain = ar.Instance(lattices.from_edges(3, [(0, 1)]), [1.0])
    assert ar.Instance(lattices.chain(3), [1.0, 0.0], fields=[-0.0, 0, 0]).identity == plain.identity
    assert ar.Instance(lattices.chain(3), [1.0, -0.0]).identity == plain.identity


def test_identity_sees_every_number():
    instance = an_instance()
    seen = {instance.identity}
    for name in ("couplings", "fields", "transverse"):
        for k in (0, 5):
            parts = {part: getattr(instance, part).copy() for part in ("couplings", "fields", "transverse")}
            parts[name][k] = np.nextafter(parts[name][k], 9)
            seen.add(ar.Instance(instance.lattice, **parts).identity)
    edges = instance.lattice.edges.copy()
    edges[0] = next((i, j) for i in range(8) for j in range(i) if instance.coupling_matrix()[i, j] == 0)
    moved = lattices.from_edges(8, edges)
    seen.add(ar.Instance(moved, instance.couplings, instance.fields, instance.transverse).identity)
    larger = lattices.from_edges(9, instance.lattice.edges)
    seen.add(ar.Instance(larger, instance.couplings, [*instance.fields, 0], [*instance.transverse, 1]).identity)
    assert len(seen) == 9


def test_identity_is_frozen():
    drawn = ar.draw_instance(lattices.square(4, 5, (False, True)), disorder.plus_minus(), seed=11)
    assert drawn.identity == "4ff965b086d19e3ba7cea2258ddae7373b8550725fa826d9ecbade7920992b85"
    dense = ar.draw_instance(
        lattices.complete(5), disorder.gaussian(), disorder.uniform(-1, 1), seed=3, index=2, normalise="sqrt_n"
    )
    assert dense.identity == "0b13908e0b5b7ef0b29e55ca6f5d97277843f54b9e88bcf70de4563f0c0bde29"


# draws


def test_draw_has_independent_streams():
    lattice = lattices.square(3, 3)
    bare = ar.draw_instance(lattice, disorder.gaussian(), seed=5, index=2)
    full = ar.draw_instance(lattice, disorder.gaussian(), disorder.gaussian(), disorder.uniform(0.5, 1.5), 5, 2)
    assert np.array_equal(bare.couplings, full.couplings)
    assert full.has_fields
    assert not bare.has_fields
    assert not np.isin(full.fields, full.couplings).any()
    assert full.transverse.min() >= 0.5
    assert full.transverse.max() < 1.5
    assert bare.name == "square 3x3, seed 5, index 2"
    assert ar.draw_instance(lattice, disorder.gaussian(), seed=5, index=3).identity != bare.identity


@pytest.mark.parametrize(
    ("normalise", "lattice", "factor"),
    [
        ("sqrt_n", lattices.complete(9), 3.0),
        ("n", lattices.complete(9), 9.0),
        ("sqrt_degree", lattices.biclique(4, 4), 2.0),
        ("sqrt_degree", lattices.chain(1), 1.0),
    ],
)
def test_normalisation(normalise, lattice, factor):
    plain = ar.draw_instance(lattice, disorder.plus_minus(), disorder.plus_minus(), seed=1)
    scaled = ar.draw_instance(lattice, disorder.plus_minus(), disorder.plus_minus(), seed=1, normalise=normalise)
    assert np.array_equal(scaled.couplings, plain.couplings / factor)
    assert np.array_equal(scaled.fields, plain.fields)


# files and pickles


def assert_same(one, other):
    assert one.identity == other.identity
    for name in ("couplings", "fields", "transverse"):
        assert np.array_equal(getattr(one, name), getattr(other, name))
        with pytest.raises(ValueError, match="read-only"):
            getattr(one, name)[0] = 0
    assert np.array_equal(one.lattice.edges, other.lattice.edges)
    assert np.array_equal(one.lattice.labels, other.lattice.labels)
    assert np.array_equal(one.lattice.coordinates, other.lattice.coordinates)
    assert (one.name, one.lattice.name, one.lattice.recipe) == (other.name, other.lattice.name, other.lattice.recipe)


@pytest.mark.parametrize(
    "instance",
    [
        an_instance(),
        an_instance().relabelled([3, 1, 2, 0, 7, 6, 5, 4]),
        ar.draw_instance(lattices.cubic(2, 2, 2).diluted(dead=[3]), disorder.gaussian(), seed=1),
    ],
    ids=["drawn by numpy", "relabelled", "diluted"],
)
def test_file_and_pickle_keep_every_bit(instance, tmp_path):
    instance.write(tmp_path / "a.json")
    assert_same(ar.Instance.read(tmp_path / "a.json"), instance)
    assert_same(pickle.loads(pickle.dumps(instance)), instance)
    assert [file.name for file in tmp_path.iterdir()] == ["a.json"]


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_content_round_trip_of_any_float(value):
    instance = ar.Instance(lattices.chain(2), [value], fields=[0.0, value])
    again = ar.Instance.from_dict(json.loads(json.dumps(instance.to_dict())))
    assert again.couplings[0] == instance.couplings[0] == value
    assert again.identity == instance.identity


def test_file_written_by_hand(tmp_path):
    file = tmp_path / "hand.json"
    file.write_text(
        '{"format": "anneal_ref instance", "version": 1, "n_sites": 3, "edges": [[0, 1]], "couplings": [-1]}'
    )
    instance = ar.Instance.read(file)
    assert (instance.name, instance.n_sites, instance.couplings.tolist()) == ("graph", 3, [-1.0])


def edited(tmp_path, **changes):
    an_instance().write(tmp_path / "a.json")
    document = json.loads((tmp_path / "a.json").read_text())
    document.update(changes)
    (tmp_path / "a.json").write_text(json.dumps({key: value for key, value in document.items() if value != "gone"}))
    return tmp_path / "a.json"


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"format": "other"}, 'must begin with "format": "anneal_ref instance", "version": 1'),
        ({"version": 2}, "`version` is 2, this library reads up to 1; install a later one"),
        ({"coupling": [1]}, "unknown key `coupling`; allowed are .*; did you mean `couplings`"),
        ({"couplings": "gone"}, "the key `couplings` is missing"),
        ({"couplings": 3}, "`couplings` must be a list; got 3"),
        ({"n_sites": True}, "`n_sites` must be a whole number; got true"),
        ({"n_sites": 7}, "must join sites 0 ... 6|shape"),
        ({"fields": [0.0]}, r"fields must have shape \(8,\), one for each site; got shape \(1,\)"),
        ({"couplings": [float("nan")] * 14}, r"couplings must be finite; got couplings\[0\] = nan"),
        ({"fields": [1.0] * 8}, "do not match the key `identity`.*restore the file"),
        ({"identity": 5}, "`identity` must be a string; got 5"),
    ],
)
def test_bad_files_name_file_and_key(changes, message, tmp_path):
    file = edited(tmp_path, **changes)
    with pytest.raises(InputError, match=message) as caught:
        ar.Instance.read(file)
    assert str(file) in str(caught.value)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", r"a.json, line 1, column 1: not JSON, or cut short"),
        ('{"format": "anneal_ref instance",\n "version"', "line 2, column 11: not JSON, or cut short"),
        ("[1]", "must hold a JSON object; got a list"),
        ('{"format": 1, "format": 2}', "the key `format` stands there twice"),
    ],
)
def test_damaged_files(text, message, tmp_path):
    (tmp_path / "a.json").write_text(text)
    with pytest.raises(InputError, match=message):
        ar.Instance.read(tmp_path / "a.json")


def test_missing_and_unwritable_files(tmp_path):
    with pytest.raises(InputError, match="there is no instance file .*nowhere.json"):
        ar.Instance.read(tmp_path / "nowhere.json")
    with pytest.raises(InputError, match="cannot be read: it is a folder"):
        ar.Instance.read(tmp_path)
    with pytest.raises(InputError, match=r"cannot write .*no such file.*choose a folder"):
        an_instance().write(tmp_path / "nowhere" / "a.json")
    (tmp_path / "a.json").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="cannot be read"):
        ar.Instance.read(tmp_path / "a.json")


def test_description():
    row = an_instance().describe()
    assert row["instance"] == "an instance"
    assert (row["sites"], row["edges"]) == (8, 14)
    assert row["identity"] == an_instance().identity[:12]
    assert ar.Instance(lattices.chain(3), [1, 1]).describe()["fields"] == "none"
    assert repr(an_instance()) == "<Instance an instance: 8 sites, 14 couplings, fields>"


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: ar.Instance("chain", [1]), "lattice must be a Lattice; got a str; see anneal_ref.lattices"),
        (lambda: ar.Instance(lattices.chain(3), [1]), r"couplings must have shape \(2,\), one for each edge.*\(1,\)"),
        (lambda: ar.Instance(lattices.chain(3), 1.0), r"couplings must have shape \(2,\).*got shape \(\)"),
        (lambda: ar.Instance(lattices.chain(2), [np.nan]), r"couplings must be finite; got couplings\[0\] = nan"),
        (lambda: ar.Instance(lattices.chain(2), [1], [0, np.inf]), r"fields must be finite; got fields\[1\] = inf"),
        (lambda: ar.Instance(lattices.chain(2), [1], [0]), r"fields must have shape \(2,\), one for each site"),
        (lambda: ar.Instance(lattices.chain(2), [1], None, [1, -1]), "at least 0; got -1.0 at site 1"),
        (lambda: ar.Instance(lattices.chain(2), ["x"]), "couplings must be an array of numbers"),
        (lambda: an_instance().energies([[1, -1]]), r"spins must have shape \(..., 8\).*got shape \(1, 2\)"),
        (lambda: an_instance().energies([0] * 8), r"spins must hold \+1 and -1 only; got 0"),
        (lambda: an_instance().gauge([1, -1]), r"sign_vector must have shape \(8,\)"),
        (lambda: an_instance().gauge([2] * 8), r"sign_vector must hold \+1 and -1 only; got 2"),
        (lambda: an_instance().relabelled([0]), r"order must have shape \(8,\)"),
        (lambda: ar.draw_instance(lattices.chain(2), [1.0]), "couplings must be a law such as disorder.plus_minus"),
        (lambda: ar.draw_instance(lattices.chain(2), None), "couplings must be a law.*got None"),
        (lambda: ar.draw_instance(lattices.chain(2), disorder.levels(2), fields=0.5), "fields must be a law.*got 0.5"),
        (lambda: ar.draw_instance(lattices.chain(2), disorder.levels(2), seed=-1), "seed must be a whole number"),
        (lambda: ar.draw_instance(lattices.chain(2), disorder.levels(2), index=0.5), "index must be a whole number"),
        (
            lambda: ar.draw_instance(lattices.chain(2), disorder.levels(2), normalise="sqrtn"),
            "normalise must be one of 'sqrt_n', 'sqrt_degree', 'n'; got 'sqrtn'; did you mean 'sqrt_n'",
        ),
    ],
)
def test_bad_input(call, message):
    with pytest.raises(InputError, match=message):
        call()
