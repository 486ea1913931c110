"""The error family: catchable as built-ins, whole after a pickle."""

import pickle

import pytest

from anneal_ref.base import errors

CASES = [
    (errors.InputError("bad"), ValueError),
    (errors.StudyError("bad"), ValueError),
    (errors.NotSupported("no", alternatives=("StateVector",)), ValueError),
    (errors.TooLarge("big", needed_bytes=5, available_bytes=3, alternatives=("MPS",)), MemoryError),
    (errors.NotConverged("slow", result={"best": 1.0}), RuntimeError),
    (errors.ArchiveError("cut short", path="a.h5", problem="truncated"), OSError),
]


@pytest.mark.parametrize(("error", "builtin"), CASES)
def test_error_is_builtin_and_survives_pickle(error, builtin):
    assert isinstance(error, errors.AnnealRefError)
    assert isinstance(error, builtin)
    back = pickle.loads(pickle.dumps(error))
    assert type(back) is type(error)
    assert str(back) == str(error)
    for name in error._carries:
        assert getattr(back, name) == getattr(error, name)
