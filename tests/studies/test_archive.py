from __future__ import annotations

import os
import threading
from dataclasses import replace

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.base import storage
from anneal_ref.base.storage import Record, read_record, write_record
from anneal_ref.studies import records
from anneal_ref.studies.archive import read_reference
from anneal_ref.studies.records import to_record

TABLE = ar.Schedule.from_table(
    [0, 0.2, 0.5, 0.8, 1], [3.0, 2.2, 0.9, 0.1, 0.0], [0.0, 0.3, 1.0, 1.9, 2.4], unit="GHz", prefactor=0.5
)
SINGLE = ar.StateVector(tolerance=1e-4, precision="single")
RAMP = ar.Schedule.linear(transverse=(6.0, 0.0), problem=(0.0, 5.0))


def solve(n=5, fields=None, seed=1, schedule=RAMP, lattice=None, duration=1.0, tolerance=1e-3, **more):
    lattice = ar.lattices.chain(n) if lattice is None else lattice
    instance = ar.draw_instance(lattice, ar.disorder.gaussian(), fields=fields, seed=seed)
    options = {key: more.pop(key) for key in ("start", "waveform") if key in more}
    return ar.reference(ar.Anneal(instance, schedule, duration, **options), tolerance, samples=400, **more)


@pytest.fixture(scope="module")
def truth():
    return solve(fields=ar.disorder.gaussian(0.4))


@pytest.fixture(scope="module")
def three(truth):
    return [truth, solve(seed=2), solve(seed=1, n=4, duration=2.0)]


def assert_same(a, b):
    assert a.identity == b.identity
    assert a.anneal.identity == b.anneal.identity
    assert a.backend == b.backend
    for name in ("outcome", "error", "tolerance", "seed", "max_runs", "budget", "stopped", "parts"):
        assert getattr(a, name) == getattr(b, name)
    for run, other in zip(a.runs, b.runs, strict=True):
        assert (run.ledger, run.refined, run.reordered) == (other.ledger, other.refined, other.reordered)
        for name in ("z", "zz", "x"):
            np.testing.assert_array_equal(getattr(run.moments, name).value, getattr(other.moments, name).value)
    for name in ("z", "zz", "x"):
        np.testing.assert_array_equal(getattr(a.moments(), name).num, getattr(b.moments(), name).num)
    np.testing.assert_array_equal(a.bits, b.bits)
    np.testing.assert_array_equal(a.folded, b.folded)
    assert str(a) == str(b)
    assert dict(a.provenance) == dict(b.provenance)
    assert str(a.ground.estimate) == str(b.ground.estimate)
    np.testing.assert_array_equal(a.ground.spins, b.ground.spins)
    assert (a.ground.how, a.ground.proved, a.ground.degeneracy) == (b.ground.how, b.ground.proved, b.ground.degeneracy)


# ---- what comes back


@pytest.mark.parametrize(
    "make",
    [
        lambda: solve(),
        lambda: solve(fields=ar.disorder.gaussian(0.4), schedule=TABLE),
        lambda: solve(lattice=ar.lattices.square(2, 3).diluted(dead=[1]), start="ground"),
        lambda: solve(waveform=ar.Waveform([0, 0.4, 0.7, 1], [0, 0.5, 0.5, 1]), backend=ar.StateVector(steps=7)),
        lambda: solve(lattice=ar.lattices.from_edges(3, [(0, 2)])),
        lambda: solve(lattice=ar.lattices.from_edges(1, [])),
        lambda: solve(n=1, lattice=ar.lattices.from_edges(1, []), fields=ar.disorder.constant(0.7), backend=SINGLE),
        lambda: solve(tolerance=1e-15, max_runs=3),
    ],
    ids=[
        "ramp",
        "table",
        "diluted from the ground state",
        "waveform",
        "single spin",
        "no edge",
        "single precision",
        "not converged",
    ],
)
def test_a_reference_comes_back_whole(make, tmp_path):
    reference = make()
    archive = ar.Archive(tmp_path)
    path = archive.add(reference)
    assert path == tmp_path / f"{reference.identity}.h5"
    assert os.listdir(tmp_path) == [path.name]
    assert_same(archive.open(reference.identity), reference)
    assert archive.audit(recompute=1.0).sound


def test_what_comes_back_can_be_evolved_and_sampled(truth, tmp_path):
    found = read_reference(ar.Archive(tmp_path).add(truth))
    np.testing.assert_array_equal(found.state().moments().zz.value, truth.moments().zz.value)
    np.testing.assert_array_equal(found.sample(30, seed=5).spins, truth.sample(30, seed=5).spins)
    assert str(found.estimate(ar.observables.q2)) == str(truth.estimate(ar.observables.q2))


def test_xarray_opens_it(truth, tmp_path):
    xarray = pytest.importorskip("xarray")
    with xarray.open_dataset(ar.Archive(tmp_path).add(truth)) as data:
        assert data["zz"].dims == ("run", "site", "other_site")
        assert data["zz_num"].shape == (5, 5)
        assert data.attrs["outcome"] == "converged"


def test_there_are_few_datasets(truth):
    record = to_record(truth)
    assert len(record.arrays) + len(record.lengths) <= 30


# ---- looking up


def test_find_goes_by_anneal_and_measured_error(three, tmp_path):
    archive = ar.Archive(tmp_path)
    truth = three[0]
    assert archive.find(truth.anneal) is None
    for reference in three:
        archive.add(reference)
    rough = ar.reference(truth.anneal, tolerance=1e-2, backend=ar.StateVector(tolerance=1e-2), samples=50)
    assert rough.error > truth.error
    archive.add(rough)
    assert archive.find(truth.anneal, 1e-2).identity == truth.identity
    assert archive.find(truth.anneal, truth.error).identity == truth.identity
    assert archive.find(truth.anneal, truth.error / 2) is None
    assert archive.find(solve(seed=9, n=3).anneal) is None
    assert archive.contains(truth.identity)
    assert not archive.contains(truth.identity[:-1] + "z")
    assert archive.list() == tuple(sorted(one.identity for one in [*three, rough]))
    assert len(archive) == 4
    assert {one.identity for one in archive} == set(archive.list())


def test_a_reference_that_missed_its_tolerance_is_found_by_what_it_reached(tmp_path):
    missed = solve(tolerance=1e-15, max_runs=3)
    archive = ar.Archive(tmp_path)
    archive.add(missed)
    assert missed.outcome == "not converged"
    assert archive.find(missed.anneal, 1e-3).identity == missed.identity
    assert archive.find(missed.anneal, 1e-15) is None


def test_the_table_reads_well(three, tmp_path):
    archive = ar.Archive(tmp_path)
    assert "no references" in archive.table()
    for reference in three:
        archive.add(reference)
    text = archive.table()
    assert len(text.splitlines()) == 4
    for word in ("instance", "chain 5, seed 2", "converged", "StateVector", three[0].identity):
        assert word in text
    damage(archive.path(three[1].identity))
    assert "its bytes do not match" in archive.table()


# ---- adding


def test_adding_twice_leaves_the_file_and_a_damaged_one_is_replaced(truth, tmp_path):
    archive = ar.Archive(tmp_path)
    path = archive.add(truth)
    before = path.stat().st_mtime_ns
    assert archive.add(truth) == path
    assert path.stat().st_mtime_ns == before
    damage(path)
    assert not archive.contains(truth.identity)
    archive.add(truth)
    assert archive.contains(truth.identity)


def test_many_may_add_the_same_reference(truth, tmp_path):
    failures = []

    def work():
        try:
            archive = ar.Archive(tmp_path)
            archive.add(truth)
            archive.open(truth.identity)
        except BaseException as error:  # a thread must hand its failure over
            failures.append(error)

    threads = [threading.Thread(target=work) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not failures
    assert os.listdir(tmp_path) == [f"{truth.identity}.h5"]


@pytest.mark.parametrize("failure", [KeyboardInterrupt(), OSError(28, os.strerror(28))])
def test_an_interrupted_or_refused_write_keeps_the_finished_ones(three, failure, tmp_path, monkeypatch):
    archive = ar.Archive(tmp_path)
    archive.add(three[0])

    def fail(*_args):
        raise failure

    monkeypatch.setattr(storage.os, "fsync", fail)
    with pytest.raises((KeyboardInterrupt, ar.ArchiveError), match="the disk is full|^$"):
        archive.add(three[1])
    monkeypatch.undo()
    assert archive.list() == (three[0].identity,)
    assert os.listdir(tmp_path) == [f"{three[0].identity}.h5"]
    assert archive.audit().sound


def test_only_references_are_added(truth, tmp_path):
    archive = ar.Archive(tmp_path)
    for other in (None, truth.moments(), "reference"):
        with pytest.raises(ar.InputError, match="an archive holds references"):
            archive.add(other)
    assert len(archive) == 0


def test_folders(tmp_path):
    (tmp_path / "file").write_text("x")
    for create in (True, False):
        with pytest.raises(ar.ArchiveError, match=r"cannot use .*file: (it is not a folder|something of that name)"):
            ar.Archive(tmp_path / "file", create=create)
    archive = ar.Archive(tmp_path / "nowhere", create=False)
    assert archive.list() == ()
    assert not (tmp_path / "nowhere").exists()
    with pytest.raises(ar.ArchiveError, match="there is no such folder"):
        archive.audit()
    assert ar.Archive(tmp_path / "a" / "b").folder.is_dir()


# ---- auditing


def test_the_audit_reports_every_damage_and_changes_nothing(three, tmp_path):
    archive = ar.Archive(tmp_path)
    paths = [archive.add(reference) for reference in three]
    (tmp_path / "x.h5.1-ab.part").write_bytes(b"half")
    assert archive.audit().sound
    damage(paths[0])
    paths[1].write_bytes(paths[1].read_bytes()[:-300])
    renamed = tmp_path / f"{'0' * 32}-{'1' * 16}.h5"
    paths[2].rename(renamed)
    (tmp_path / "notes.h5").write_text("hello")
    before = {path: path.read_bytes() for path in tmp_path.iterdir()}
    audit = archive.audit(recompute=1.0)
    assert {path: path.read_bytes() for path in tmp_path.iterdir()} == before
    problems = {row.file: row.problem for row in audit.rows}
    assert "do not match their checksum" in problems[paths[0].name].replace("its checksum", "their checksum")
    assert "cut short" in problems[paths[1].name]
    assert f"it holds reference {three[2].identity}" == problems[renamed.name]
    assert "not an HDF5 file" in problems["notes.h5"]
    assert not audit.sound
    assert audit.recomputed == 0
    assert audit.leftovers == ("x.h5.1-ab.part",)
    text = str(audit)
    for word in ("leftover", "4 references", "4 with problems", "cut short"):
        assert word in text


def test_the_audit_recomputes_a_seeded_fraction(three, tmp_path):
    archive = ar.Archive(tmp_path)
    for reference in three:
        archive.add(reference)
    assert archive.audit().recomputed == 0
    one = archive.audit(recompute=0.1, seed=3)
    assert one.recomputed == 1
    assert one == archive.audit(recompute=0.1, seed=3)
    assert len({archive.audit(recompute=0.1, seed=seed).rows for seed in range(12)}) > 1
    every = archive.audit(recompute=1.0)
    assert every.recomputed == 3
    assert every.sound
    assert all(0 <= row.deviation <= 1 for row in every.rows)
    assert "all sound" in str(every)


def forged(truth, **changes):
    """A record with altered contents and valid checksums."""
    record = to_record(truth)
    return Record(record.attributes, {**record.arrays, **changes}, record.dims)


@pytest.mark.parametrize(
    ("what", "problem"),
    [
        ("moments", "recomputed, it is off by"),
        ("bars", "stored error bars of zz"),
        ("probabilities", "its probabilities give moments"),
        ("samples", "its samples are"),
    ],
)
def test_the_audit_sees_through_valid_checksums(what, problem, truth, tmp_path):
    record = to_record(truth)
    if what == "moments":
        # shift one correlation in every run, and drop what would contradict it
        arrays = {name: array.copy() for name, array in record.arrays.items() if name != "probabilities"}
        for i, j in ((0, 1), (1, 0)):
            arrays["zz"][:, i, j] += 1e-5
        record = Record(record.attributes, arrays, {name: record.dims[name] for name in arrays})
    elif what == "bars":
        record = forged(truth, zz_num=record.arrays["zz_num"] / 2)
    elif what == "probabilities":
        record = forged(truth, probabilities=record.arrays["probabilities"][::-1].copy())
    else:
        record = forged(truth, samples=record.arrays["samples"] ^ np.uint8(1))
    write_record(tmp_path / f"{truth.identity}.h5", record)
    audit = ar.Archive(tmp_path).audit(recompute=1.0)
    assert problem in audit.rows[0].problem
    assert not audit.sound


def test_a_reference_of_an_unknown_backend_is_refused_with_its_name(truth, tmp_path, monkeypatch):
    archive = ar.Archive(tmp_path)
    archive.add(truth)
    monkeypatch.setattr(records, "BACKENDS", {})
    with pytest.raises(ar.ArchiveError, match=r"back-end StateVector.*; install the library version"):
        archive.open(truth.identity)
    assert "back-end StateVector" in archive.audit().rows[0].problem


def test_other_records_and_newer_ones_are_refused(truth, tmp_path):
    path = write_record(tmp_path / "a.h5", Record({"kind": "samples", "version": 1}, {}, {}))
    with pytest.raises(ar.ArchiveError, match="holds samples, not a reference"):
        read_reference(path)
    record = to_record(truth)
    path = write_record(tmp_path / "b.h5", replace(record, attributes={**record.attributes, "version": 2}))
    with pytest.raises(ar.ArchiveError, match="version 2"):
        read_reference(path)
    path = write_record(tmp_path / "c.h5", Record({"kind": "reference", "version": 1}, {}, {}))
    with pytest.raises(ar.ArchiveError, match="c.h5: its contents do not make a reference"):
        read_reference(path)


def test_find_passes_over_a_damaged_file_with_a_warning(truth, tmp_path):
    archive = ar.Archive(tmp_path)
    damage(archive.add(truth))
    with pytest.warns(ar.AnnealRefWarning, match="passed over a reference"):
        assert archive.find(truth.anneal) is None


def test_a_file_holds_what_its_docstring_lists(truth, tmp_path):
    record = read_record(ar.Archive(tmp_path).add(truth))
    assert set(record.arrays) <= set(records._DIMS)
    for name in record.arrays:
        assert f"`{name}`" in records.__doc__


def damage(path):
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 4
    path.write_bytes(content)
