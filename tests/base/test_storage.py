from __future__ import annotations

import errno
import hashlib
import os
import resource
import signal
import subprocess
import sys
import threading
import time
from contextlib import contextmanager

import h5py
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as numpy_strategies

from anneal_ref.base import storage
from anneal_ref.base.errors import ArchiveError, InputError
from anneal_ref.base.storage import Record, read_record, write_record


def small(value=1.0):
    return Record(
        {"kind": "note", "text": "größer", "whole": 3, "real": value},
        {"z": np.array([[0.5, np.nan], [1, 2]]), "bits": np.arange(3, dtype=np.uint8), "site": np.array([4, 7])},
        {"z": ("run", "site"), "bits": ("byte",), "site": ("site",)},
    )


def big():
    rng = np.random.default_rng(1)
    return Record(
        {"kind": "big"},
        {
            "p": rng.random(300_000),
            "shots": rng.integers(0, 256, (4000, 2)).astype(np.uint8),
            "c": rng.random((2, 4, 4)),
        },
        {"p": ("state",), "shots": ("shot", "byte"), "c": ("run", "site", "other_site")},
    )


@pytest.mark.parametrize("make", [small, big])
def test_round_trip(make, tmp_path):
    record = make()
    path = write_record(tmp_path / "a.h5", record)
    back = read_record(path)
    assert back.attributes == record.attributes
    assert {name: tuple(names) for name, names in back.dims.items()} == record.dims
    for name, array in record.arrays.items():
        np.testing.assert_array_equal(back.arrays[name], array)
        assert back.arrays[name].dtype == array.dtype
        assert not back.arrays[name].flags.writeable
    assert back.header["format"] == "anneal_ref"
    assert back.header["sha256"] == record.digest()
    assert os.listdir(tmp_path) == ["a.h5"]


@given(
    array=numpy_strategies.arrays(
        st.sampled_from(["<f8", ">f8", "<f4", "<i8", "<i4", "u1", "i1"]),
        numpy_strategies.array_shapes(max_dims=3, max_side=5),
    ),
    text=st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=40),
    number=st.floats(allow_nan=False, allow_infinity=False) | st.integers(-(2**63), 2**63 - 1),
)
def test_any_array_and_attribute_come_back(array, text, number, tmp_path_factory):
    record = Record({"text": text, "number": number}, {"a": array}, {"a": ("x", "y", "z")[: array.ndim]})
    back = read_record(write_record(tmp_path_factory.getbasetemp() / "any.h5", record))
    assert back.attributes == record.attributes
    np.testing.assert_array_equal(back.arrays["a"], array)
    assert back.arrays["a"].dtype == array.dtype.newbyteorder("<")
    assert back.dims == record.dims


def test_large_arrays_are_chunked_compressed_and_checked(tmp_path):
    path = write_record(tmp_path / "a.h5", big())
    with h5py.File(path) as file:
        for name in ("p", "shots"):
            assert file[name].chunks
            assert file[name].compression == "gzip"
            assert file[name].fletcher32
        assert file["p"].shuffle
        assert not file["c"].chunks


def test_xarray_opens_it_with_named_axes(tmp_path):
    xarray = pytest.importorskip("xarray")
    path = write_record(tmp_path / "a.h5", small())
    with xarray.open_dataset(path) as data:
        assert data["z"].dims == ("run", "site")
        assert data["site"].values.tolist() == [4, 7]
        assert data["bits"].dims == ("byte",)
        assert not any(str(dim).startswith("phony") for dim in data.dims)


def test_digest_sees_every_part_of_the_contents():
    base = small()
    variants = [
        Record({**base.attributes, "real": 1.0000000000000002}, base.arrays, base.dims),
        Record(base.attributes, {**base.arrays, "bits": np.array([0, 1, 3], np.uint8)}, base.dims),
        Record(base.attributes, {**base.arrays, "bits": np.arange(3, dtype=np.int16)}, base.dims),
        Record(base.attributes, base.arrays, {**base.dims, "bits": ("octet",)}),
        Record(base.attributes, {**base.arrays, "more": np.ones(1)}, {**base.dims, "more": ("one",)}),
    ]
    assert len({record.digest() for record in [base, *variants]}) == 6


def test_a_flipped_bit_is_found_wherever_it_is(tmp_path):
    path = write_record(tmp_path / "a.h5", small())
    whole = path.read_bytes()
    bits = np.random.default_rng(5).integers(0, 8, len(whole))
    ends = [*range(100), *range(len(whole) - 100, len(whole))]
    for place in sorted({*ends, *range(0, len(whole), 9)}):
        damaged = bytearray(whole)
        damaged[place] ^= 1 << bits[place]
        path.write_bytes(damaged)
        with pytest.raises(ArchiveError, match=r"a\.h5: .*; .*(restore|out of)") as caught:
            read_record(path)
        assert caught.value.path == str(path)
        assert caught.value.problem
        assert path.read_bytes() == damaged


def test_the_content_sum_alone_finds_altered_attributes_and_arrays(tmp_path):
    for change in ("attribute", "array"):
        path = write_record(tmp_path / "a.h5", small())
        with h5py.File(path, "r+") as file:
            if change == "attribute":
                file.attrs["real"] = 2.0
            else:
                file["bits"][1] = 9
        path.write_bytes(reseal(path.read_bytes()))  # HDF5 cut the seal off when it changed the file
        with pytest.raises(ArchiveError, match="contents do not match"):
            read_record(path)


@pytest.mark.parametrize("keep", [0, 1, 7, 8, 100, 0.5, -1, -40, -89, -200])
def test_a_file_cut_short_is_refused(keep, tmp_path):
    path = write_record(tmp_path / "a.h5", small())
    whole = path.read_bytes()
    path.write_bytes(whole[: int(keep * len(whole)) if isinstance(keep, float) else keep])
    with pytest.raises(ArchiveError, match="restore it from a copy"):
        read_record(path)


def test_bytes_added_behind_the_end_are_found(tmp_path):
    path = write_record(tmp_path / "a.h5", small())
    path.write_bytes(path.read_bytes() + b"\n")
    with pytest.raises(ArchiveError, match="changed after it was written"):
        read_record(path)


def test_files_of_others_are_refused_by_name(tmp_path):
    path = tmp_path / "a.h5"
    with pytest.raises(ArchiveError, match="cannot be read"):
        read_record(path)
    with pytest.raises(ArchiveError, match="cannot be read"):
        read_record(tmp_path)
    path.write_text("hello")
    with pytest.raises(ArchiveError, match="not an HDF5 file"):
        read_record(path)
    with h5py.File(path, "w") as file:
        file["x"] = np.ones(3)
    with pytest.raises(ArchiveError, match="not a file of this package"):
        read_record(path)
    path.write_bytes(reseal(path.read_bytes()))
    with pytest.raises(ArchiveError, match="not a file of this package|cannot be decoded"):
        read_record(path)


def test_a_newer_format_is_refused_with_advice(tmp_path, monkeypatch):
    monkeypatch.setattr(storage, "FORMAT_VERSION", 2)
    path = write_record(tmp_path / "a.h5", small())
    monkeypatch.undo()
    with pytest.raises(ArchiveError, match=r"format version is 2, .* reads up to 1; install"):
        read_record(path)


@pytest.mark.parametrize(
    ("attributes", "arrays", "dims", "message"),
    [
        ({"format": "x"}, {}, {}, "taken by the header"),
        ({"a": [1]}, {}, {}, "must be a str, int or float; got a list"),
        ({"a": float("nan")}, {}, {}, "only finite numbers"),
        ({"a": "x" * 60_001}, {}, {}, "store it as an array"),
        ({}, {"a": np.ones(2)}, {}, "must name the same arrays"),
        ({}, {"a": np.ones(2)}, {"a": ("x", "y")}, "one name per axis"),
        ({}, {"a": np.array(["x"])}, {"a": ("x",)}, "integers or floats"),
        ({}, {"a": np.ones(0)}, {"a": ("x",)}, "have entries"),
        ({}, {"a": np.ones((2, 2))}, {"a": ("x", "x")}, "name each axis apart"),
        ({}, {"x": np.ones((2, 2)), "b": np.ones(2)}, {"x": ("y", "z"), "b": ("x",)}, "name of another axis"),
        ({}, {"a": np.ones(2), "b": np.ones(3)}, {"a": ("x",), "b": ("x",)}, "must have one length"),
    ],
)
def test_what_a_record_refuses(attributes, arrays, dims, message):
    with pytest.raises(InputError, match=message):
        Record(attributes, arrays, dims)


def test_a_full_disk_leaves_no_half_file(tmp_path):
    old = write_record(tmp_path / "a.h5", small())
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, hard))  # the kernel refuses to write beyond
    try:
        with pytest.raises(ArchiveError, match="cannot write .*a.h5: File too large; nothing of it was left") as caught:
            write_record(tmp_path / "a.h5", big())
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
    assert caught.value.problem == "File too large"
    assert os.listdir(tmp_path) == ["a.h5"]
    assert read_record(old).attributes == small().attributes


@pytest.mark.parametrize("call", ["fsync", "replace", "open"])
@pytest.mark.parametrize(
    ("code", "words"),
    [
        (errno.ENOSPC, "the disk is full"),
        (errno.EROFS, "it lies on a read-only disk"),
        (errno.EIO, "the disk reports an error"),
        (errno.EMLINK, os.strerror(errno.EMLINK)),
    ],
)
def test_any_refusal_of_the_file_system_is_an_archive_error(call, code, words, tmp_path, monkeypatch):
    def refuse(*_args, **_kwargs):
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr(storage.os, call, refuse)
    with pytest.raises(ArchiveError, match=words):
        write_record(tmp_path / "a.h5", small())
    monkeypatch.undo()
    assert os.listdir(tmp_path) == []


@contextmanager
def without_privileges():
    """Root may write anywhere; act as nobody for a moment."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


def test_read_only_and_missing_folders(tmp_path, tmp_path_factory):
    with pytest.raises(ArchiveError, match="there is no such file or folder; .* check that the folder exists"):
        write_record(tmp_path / "nowhere" / "a.h5", small())
    for folder in (tmp_path, *list(tmp_path.parents)[:2]):
        folder.chmod(0o755)
    tmp_path.chmod(0o555)
    with without_privileges(), pytest.raises(ArchiveError, match="permission is denied"):
        write_record(tmp_path / "a.h5", small())
    tmp_path.chmod(0o755)
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("call", ["fsync", "replace"])
def test_an_interrupt_leaves_nothing_visible(call, tmp_path, monkeypatch):
    def interrupt(*_args):
        raise KeyboardInterrupt

    monkeypatch.setattr(storage.os, call, interrupt)
    with pytest.raises(KeyboardInterrupt):
        write_record(tmp_path / "a.h5", small())
    monkeypatch.undo()
    assert os.listdir(tmp_path) == []


def test_writers_of_one_name_do_not_disturb_each_other(tmp_path):
    failures = []

    def work(value):
        try:
            for _ in range(10):
                assert read_record(write_record(tmp_path / "a.h5", small(value))).attributes["real"] in (0.0, 1.0, 2.0)
        except BaseException as error:  # a thread must hand its failure over
            failures.append(error)

    threads = [threading.Thread(target=work, args=(float(k),)) for k in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert not failures
    assert os.listdir(tmp_path) == ["a.h5"]


def reseal(image):
    """Give altered bytes a valid seal, as only a forger would."""
    return image + storage._SEAL + hashlib.sha256(image).hexdigest().encode() + b"\n"


@pytest.mark.parametrize("blow", [signal.SIGINT, signal.SIGKILL])
def test_a_killed_writer_leaves_only_whole_files(blow, tmp_path):
    code = (
        "import sys, numpy as np\n"
        "from anneal_ref.base.storage import Record, write_record\n"
        "arrays = {'a': np.random.default_rng(0).random(400_000)}\n"
        "for k in range(100_000):\n"
        "    write_record(f'{sys.argv[1]}/{k % 50}.h5', Record({'k': k}, arrays, {'a': ('x',)}))\n"
    )
    writer = subprocess.Popen([sys.executable, "-c", code, str(tmp_path)], stderr=subprocess.DEVNULL)
    while len(list(tmp_path.glob("*.h5"))) < 3:
        assert writer.poll() is None
        time.sleep(0.01)
    for _ in range(20):
        writer.send_signal(blow)
        try:
            writer.wait(timeout=3)
            break
        except subprocess.TimeoutExpired:
            continue  # the HDF5 binding swallows an interrupt now and then
    else:
        writer.kill()
    assert writer.wait() != 0
    files = list(tmp_path.glob("*.h5"))
    assert len(files) >= 3
    for path in files:
        read_record(path)
    if blow == signal.SIGINT:
        assert not list(tmp_path.glob("*.part"))
