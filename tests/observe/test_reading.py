"""Sample files: what is written reads back the same, and every bad file is refused with the place named."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from anneal_ref.base.errors import ArchiveError, InputError
from anneal_ref.base.storage import Record, write_record
from anneal_ref.observe.manifest import Manifest
from anneal_ref.observe.samples import Samples

SPINS = hnp.arrays(np.int8, st.tuples(st.integers(1, 6), st.integers(1, 11)), elements=st.sampled_from([1, -1]))


@st.composite
def manifests(draw: st.DrawFn, n: int) -> Manifest:
    gauge = draw(st.none() | st.lists(st.sampled_from([1, -1]), min_size=n, max_size=n))
    printable = st.text(st.characters(codec="utf-8", categories=["L", "N", "P", "S"]), min_size=1)
    return Manifest(
        instance=draw(st.none() | st.text("0123456789abcdef", min_size=64, max_size=64)),
        duration=draw(st.none() | st.floats(1e-300, 1e300)),
        gauge=gauge,
        undone=gauge is not None and draw(st.booleans()),
        batch=draw(st.none() | st.integers(-(2**31), 2**31)),
        sites=draw(st.none() | st.lists(st.integers(0, 10**6), min_size=n, max_size=n, unique=True)),
        source=draw(st.none() | printable),
    )


@pytest.mark.parametrize("suffix", [".csv", ".txt", ".dat", ".npz", ".h5", ".hdf5", ".npy"])
@settings(max_examples=25, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.data())
def test_round_trip(tmp_path: Path, suffix: str, data: st.DataObject) -> None:
    spins = data.draw(SPINS)
    manifest = data.draw(manifests(spins.shape[1]))
    groups = None
    if suffix != ".npy":
        groups = data.draw(st.none() | st.lists(st.integers(-5, 2**40), min_size=len(spins), max_size=len(spins)))
    path = tmp_path / f"run{suffix}"
    Samples(spins, manifest, groups).write(path)
    again = Samples.read(path, values="spins" if suffix == ".npy" else None)
    np.testing.assert_array_equal(again.spins, spins)
    assert again.manifest.to_dict() == manifest.to_dict()
    assert (again.groups is None) == (groups is None)
    if groups is not None:
        assert again.groups is not None
        assert again.groups.tolist() == groups
    assert not list(tmp_path.glob("*.part"))


def read(tmp_path: Path, text: str | bytes, name: str = "run.csv", **options: object) -> Samples:
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return Samples.read(path, **options)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "text",
    [
        "1,-1,1\n-1,-1,1\n",
        "+1, -1, +1\r\n-1, -1, +1\r\n",
        "1;-1;1\n-1;-1;1",
        "1 -1  1\n\n\t-1 -1 1\n",
        "# a remark: of no importance\n1,-1,1 # the first\n# between\n-1,-1,1\n",
        "1.0,-1.0,1.0\n-1e0,-1.000000000000000000e+00,1\n",
        "\ufeff1,-1,1\n-1,-1,1\n",
        "# values: bits\n0,1,0\n1,1,0\n",
        "# values: bits\ncount,s0,s1,s2\n1,0,1,0\n0,1,1,1\n1,1,1,0\n",
    ],
)
def test_ways_to_write_the_same_shots(tmp_path: Path, text: str) -> None:
    assert read(tmp_path, text).spins.tolist() == [[1, -1, 1], [-1, -1, 1]]


def test_bits_by_argument_and_in_arrays(tmp_path: Path) -> None:
    assert read(tmp_path, "0,1\n1,1\n", values="bits").spins.tolist() == [[1, -1], [-1, -1]]
    np.save(tmp_path / "bits.npy", np.array([[False, True]]))
    assert Samples.read(tmp_path / "bits.npy", values="bits").spins.tolist() == [[1, -1]]
    np.savez(tmp_path / "bits.npz", spins=np.array([[0, 1], [1, 1]]), values="bits", counts=np.array([2, 1]))
    assert Samples.read(tmp_path / "bits.npz").spins.tolist() == [[1, -1], [1, -1], [-1, -1]]


def test_names_counts_and_groups(tmp_path: Path) -> None:
    text = 'group,"s7",count,site 3\n4,1,2,-1\n5,-1,1,-1\n'
    samples = read(tmp_path, text)
    assert samples.spins.tolist() == [[1, -1], [1, -1], [-1, -1]]
    assert samples.manifest.to_dict() == {"sites": [7, 3]}
    assert samples.groups is not None
    assert samples.groups.tolist() == [4, 4, 5]


def test_entries_at_the_head(tmp_path: Path) -> None:
    head = f"# instance: {'ab' * 32}\n# duration: 7\n# gauge: +1 -1\n# sites: [4, 2]\n# batch: 3\n"
    found = read(tmp_path, head + "# source: Saltmarsh: east\n1,-1\n").manifest
    assert found.to_dict() == {
        "instance": "ab" * 32, "duration": 7.0, "gauge": [1, -1], "batch": 3, "sites": [4, 2],
        "source": "Saltmarsh: east",
    }  # fmt: skip


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "run.csv: the file is empty"),
        ("\n  \n# only a remark\n", "run.csv: the file holds no shots"),
        ("s1,s2\n", "run.csv: the file holds no shots"),
        ("1,-1,1\n1,-1\n", "run.csv: line 2: 2 values, where the first line of data has 3"),
        ("# a\n\n1,-1\n1,-1\n\n# b\n1,-1,1\n", "run.csv: line 7: 3 values, where the first line of data has 2"),
        ("1,-1\n1,0\n", "run.csv: line 2, column 2: 0 is not allowed; a file of spins holds .*'# values: bits'"),
        ("1,-1\n\n1,2\n", "run.csv: line 3, column 2: 2 is not allowed"),
        ("1,-1\n-1,nan\n", "run.csv: line 2, column 2: nan is not allowed"),
        ("nan,-1\n", "run.csv: line 1, column 1: nan is not allowed"),
        ("1,-1\n-1,inf\n", "run.csv: line 2, column 2: inf is not allowed"),
        ("1,-1\n-1,0.5\n", "run.csv: line 2, column 2: 0.5 is not allowed"),
        ("1,-1\n-1,x\n", "run.csv: line 2, column 2: 'x' is not a number"),
        ("1,-1\n-1,\n", "run.csv: line 2, column 2: the value is missing"),
        ("1,-1,\n-1,1,\n", "run.csv: line 1, column 3: the value is missing"),
        ("1,-1\n   \n-1,1,1\n", "run.csv: line 3"),
        ("1,-1\n1;-1\n", "run.csv: line 2"),
        ("1,1\n1,1\n", "run.csv: the file holds ones only, .*values='bits'"),
        ("0,1\n1,1\n", "run.csv: the file holds 0 and 1 only, .*'# values: bits'"),
        ("# values: bits\n0,1\n-1,1\n", "run.csv: line 3, column 1: -1 is not allowed; a file of bits holds 0"),
        ("# values: spins\n0,1\n", "run.csv: line 2, column 1: 0 is not allowed"),
        ("# values: both\n0,1\n", "run.csv: values must be spins .* or bits .*; got 'both'"),
        ("1,-1,z\n1,1,1\n", "run.csv: line 1, column 3: 'z' is neither a value nor the name of a column"),
        ("s1,-1\n1,1\n", "run.csv: line 1, column 2: '-1' is neither"),
        ("s1,s1\n1,-1\n", r"names of the columns: sites must differ from each other; \[1\] occur"),
        ("s1,spin\n1,-1\n", "line 1: some sites are named by a label and some"),
        ("count,count,s1\n1,1,-1\n", "line 1: there are 2 columns 'count'"),
        ("count,group\n1,1\n", "line 1: no column of spins is named"),
        ("s1,s2\n1,-1,1\n", "line 2: 3 values under 2 names"),
        ("s1,s2\n1,-1\ns1,s2\n", "line 3, column 1: 's1' is not a number"),
        ("count,s1\n-2,-1\n", "line 2, column 1: a count must be a whole number of at least 0; got -2"),
        ("count,s1\n2,-1\n1.5,1\n", "line 3, column 1: a count must be a whole number of at least 0; got 1.5"),
        ("count,s1\nnan,-1\n", "line 2, column 1: a count must be a whole number of at least 0; got nan"),
        ("group,s1\n0.5,-1\n", "line 2, column 1: a group must be a whole number; got 0.5"),
        ("count,s1\n0,-1\n", "the counts add up to 0 shots; allowed are 1 to 1000000000"),
        ("count,s1\n1e15,-1\n", r"the counts add up to 1e\+15 shots"),
        ("# instnce: x\n1,-1\n", "line 1: 'instnce' is no entry of a manifest; did you mean 'instance'"),
        ("# batch: 1\n# batch: 1\n1,-1\n", "line 2: 'batch' is given for the second time"),
        ("# duration: long\n1,-1\n", "the entry duration is not readable: 'long'"),
        ("# undone: maybe\n1,-1\n", "the entry undone is not readable: 'maybe'"),
        ("# gauge: 1 2\n1,-1\n", "gauge must hold .*1 and -1 only"),
        ("# duration: -3\n1,-1\n", "run.csv: duration must be a positive number; got -3.0"),
        (
            "# format: anneal_ref samples 9\n1,-1\n",
            "reads the format 'anneal_ref samples 1'; got 'anneal_ref samples 9'",
        ),
        ("# sites: 1 2 3\n1,-1\n", "the manifest speaks of 3 sites; the file has 2 columns"),
        ("# gauge: 1 -1 1\n1,-1\n", "run.csv: the manifest speaks of 3 sites; the file has 2 columns"),
        ("# gauge: 1 -1 1\ns1,s2\n1,-1\n", "run.csv: .*gauge and sites must have .*got 3 signs and 2 sites"),
        ("# sites: 1 2\ns2,s1\n1,-1\n", r"differ in sites: \[1, 2\] against \[2, 1\]"),
        (
            "1,-1\n# batch: 2\n-1,1\n",
            r"line 2: an entry of the manifest \(batch\) among the data; .*Samples.concatenate",
        ),
    ],
)
def test_bad_text(tmp_path: Path, text: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        read(tmp_path, text)


def test_text_that_is_none(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="run.csv: line 1"):
        read(tmp_path, b"\xff\xfe\x00\x01")
    with pytest.raises(InputError, match="run.csv: line 2, column 2"):
        read(tmp_path, b"1,-1\n1,\xff\n")


def test_bad_paths_and_arguments(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"missing.csv: no such file"):
        Samples.read(tmp_path / "missing.csv")
    with pytest.raises(InputError, match=r"no such file"):
        Samples.read(tmp_path / "folder.csv" / "x.csv")
    with pytest.raises(InputError, match=r"ends in one of .csv, .*; got '.mat'"):
        Samples.read(tmp_path / "run.mat")
    with pytest.raises(InputError, match=r"got 'no suffix'"):
        Samples([[1]]).write(tmp_path / "run")
    with pytest.raises(InputError, match="holds bits, and the argument `values` says spins; .*remove it"):
        read(tmp_path, "# values: bits\n0,1\n", values="spins")
    with pytest.raises(InputError, match="values must be one of 'spins', 'bits'; got 'bit'; did you mean"):
        read(tmp_path, "0,1\n", values="bit")


@pytest.mark.parametrize("suffix", [".npz", ".h5"])
@pytest.mark.parametrize("values", ["spins", "bits"])
def test_files_that_say_what_they_hold_are_read_as_they_say(tmp_path: Path, suffix: str, values: str) -> None:
    path = tmp_path / f"run{suffix}"
    Samples([[1, -1], [1, 1]]).write(path)
    assert Samples.read(path, values).spins.tolist() == [[1, -1], [1, 1]]  # type: ignore[arg-type]


def test_values_are_for_archives_that_do_not_say(tmp_path: Path) -> None:
    np.savez(tmp_path / "run.npz", spins=np.array([[0, 1], [1, 1]]))
    assert Samples.read(tmp_path / "run.npz", "bits").spins.tolist() == [[1, -1], [-1, -1]]


def test_a_sidecar_with_a_gauge_of_another_length(tmp_path: Path) -> None:
    (tmp_path / "run.csv.manifest.json").write_text('{"gauge": [1, -1, 1]}')
    with pytest.raises(InputError, match=r"run.csv: the manifest speaks of 3 sites; the file has 2"):
        read(tmp_path, "1,-1\n")
    with pytest.raises(InputError, match=r"run.csv and .*run.csv.manifest.json: .*got 3 signs and 2 sites"):
        read(tmp_path, "# sites: 4 5\n1,-1\n")


def test_files_that_the_system_does_not_give(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "run.csv.manifest.json").write_bytes(b"\xff")
    with pytest.raises(InputError, match=r"run.csv.manifest.json: .*cannot be read: it is not text in UTF-8"):
        read(tmp_path, "1,-1\n")

    def refuse(*args: object, **kwargs: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.raises(InputError, match=r"run.csv: the file cannot be read: permission is denied"):
        Samples.read(tmp_path / "run.csv")


def test_manifest_beside_the_file(tmp_path: Path) -> None:
    (tmp_path / "run.csv.manifest.json").write_text('{"duration": 7}')
    assert read(tmp_path, "# batch: 1\n1,-1\n").manifest.to_dict() == {"duration": 7.0, "batch": 1}
    assert read(tmp_path, "1,-1\n", manifest=Manifest(batch=4)).manifest.to_dict() == {"duration": 7.0, "batch": 4}
    with pytest.raises(InputError, match=r"run.csv and .*manifest.json differ in duration: 3.0 against 7.0"):
        read(tmp_path, "# duration: 3\n1,-1\n")
    with pytest.raises(InputError, match="the manifest given by the caller differ in duration"):
        read(tmp_path, "1,-1\n", manifest=Manifest(duration=8))


@pytest.mark.parametrize(
    ("array", "message"),
    [
        (np.array([1, -1]), r"the array must be numbers of shape \(n_shots, n_sites\); got dtype int64, shape \(2,\)"),
        (np.zeros((0, 3)), r"got dtype float64, shape \(0, 3\)"),
        (np.array([["a"]]), "the array must be numbers"),
        (np.array([[1, -1], [1, 3]]), "shot 1, site 1: 3 is not allowed"),
        (np.array([[1, np.nan]]), "shot 0, site 1: nan is not allowed"),
        (np.ones((2, 2)), "ones only"),
    ],
)
def test_bad_arrays(tmp_path: Path, array: np.ndarray, message: str) -> None:
    np.save(tmp_path / "run.npy", array)
    with pytest.raises(InputError, match=message):
        Samples.read(tmp_path / "run.npy")


def test_bad_binary_files(tmp_path: Path) -> None:
    for name in ("run.npy", "run.npz"):
        with pytest.raises(InputError, match=f"{name}: not readable as"):
            read(tmp_path, b"nonsense", name)
    np.save(tmp_path / "objects.npy", np.array([[object()]], dtype=object), allow_pickle=True)
    with pytest.raises(InputError, match="not readable as NPY"):
        Samples.read(tmp_path / "objects.npy")
    np.savez(tmp_path / "a.npz", spin=np.ones((1, 1)))
    with pytest.raises(InputError, match="an NPZ file holds spins and optionally .*; got spin"):
        Samples.read(tmp_path / "a.npz")
    np.savez(tmp_path / "b.npz", spins=-np.ones((2, 1)), groups=np.array([1]))
    with pytest.raises(InputError, match="groups must have one entry for each of 2 shots; got 1"):
        Samples.read(tmp_path / "b.npz")
    np.savez(tmp_path / "c.npz", spins=-np.ones((2, 1)), counts=np.array([1, -1]))
    with pytest.raises(InputError, match=r"counts\[1\] must be a whole number of at least 0; got -1"):
        Samples.read(tmp_path / "c.npz")
    (tmp_path / "d.npz").write_bytes((tmp_path / "c.npz").read_bytes()[:-40])
    with pytest.raises(InputError, match="not readable as NPZ"):
        Samples.read(tmp_path / "d.npz")
    (tmp_path / "e.npy").write_bytes((tmp_path / "c.npz").read_bytes())
    with pytest.raises(InputError, match="an NPZ archive ends in .npz"):
        Samples.read(tmp_path / "e.npy")


def test_damaged_hdf5(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    Samples([[1, -1, 1], [-1, -1, 1]]).write(path)
    whole = path.read_bytes()
    for damaged in (whole[: len(whole) // 2], whole[:3000] + bytes([whole[3000] ^ 4]) + whole[3001:], b"text"):
        path.write_bytes(damaged)
        with pytest.raises(ArchiveError, match="run.h5"):
            Samples.read(path)
    write_record(path, Record({"kind": "reference", "version": 1}, {"a": np.ones(1)}, {"a": ("x",)}))
    with pytest.raises(InputError, match="has kind 'samples' and version 1; got 'reference' and 1"):
        Samples.read(path)


def test_npy_has_no_room_for_groups(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="NPY has no room for the groups"):
        Samples([[1], [-1]], groups=[0, 1]).write(tmp_path / "run.npy")


def test_a_failed_write_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "run.csv"
    Samples([[1, -1]]).write(path)
    old = path.read_bytes()

    def full(_: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OSError, match="No space left"):
        Samples([[-1, -1]]).write(path)
    assert path.read_bytes() == old
    assert [p.name for p in tmp_path.iterdir()] == ["run.csv"]
