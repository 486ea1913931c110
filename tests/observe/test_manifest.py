from __future__ import annotations

import json

import pytest

from anneal_ref.base.errors import InputError
from anneal_ref.observe.manifest import Manifest

IDENTITY = "0123456789abcdef" * 4


def test_round_trip_through_json() -> None:
    manifest = Manifest(IDENTITY, 7, [1, -1], True, 3, [5, 9], "a device")
    again = Manifest.from_json(manifest.to_json(), "here")
    assert again.to_dict() == manifest.to_dict()
    assert again.n_columns == 2
    assert Manifest().to_dict() == {}
    assert Manifest().n_columns is None


@pytest.mark.parametrize(
    ("entries", "message"),
    [
        ({"instance": "abc"}, "instance must be an identity of 64 hexadecimal digits"),
        ({"duration": -1}, "duration must be a positive number; got -1"),
        ({"duration": float("nan")}, "duration must be a positive number; got nan"),
        ({"gauge": [1, 0]}, "gauge must hold .*1 and -1 only; got 0"),
        ({"undone": True}, "there is no gauge"),
        ({"undone": 1}, "undone must be true or false; got 1"),
        ({"batch": 1.5}, "batch must be a whole number; got 1.5"),
        ({"sites": [3, 3]}, r"sites must differ from each other; \[3\] occur more than once"),
        ({"sites": [1, -2]}, "sites must be whole numbers of at least 0; got -2"),
        ({"sites": [1, 2], "gauge": [1]}, "got 1 signs and 2 sites"),
        ({"source": "two\nlines"}, "source must be one line of text"),
        ({"source": " x"}, "without white space around it; got ' x'"),
    ],
)
def test_bad_entries(entries: dict[str, object], message: str) -> None:
    with pytest.raises(InputError, match=message):
        Manifest(**entries)  # type: ignore[arg-type]
    with pytest.raises(InputError, match=f"run.json: .*{message}"):
        Manifest.from_dict(entries, "run.json")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", "run.json: not readable as JSON"),
        ("[1]", "run.json: a manifest is a JSON object .* got list"),
        ('{"instnce": "a"}', "run.json: 'instnce' is no key of a manifest; .*did you mean 'instance'"),
        ('{"format": "anneal_ref samples 2"}', "reads the format 'anneal_ref samples 1'; got 'anneal_ref samples 2'"),
    ],
)
def test_bad_sidecars(text: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Manifest.from_json(text, "run.json")


def test_merging_fills_gaps_and_refuses_contradictions() -> None:
    merged = Manifest(duration=7).merged(Manifest(batch=2), ("a", "b"))
    assert merged.to_dict() == {"duration": 7.0, "batch": 2}
    with pytest.raises(InputError, match="a and b differ in duration: 7.0 against 8.0"):
        Manifest(duration=7).merged(Manifest(duration=8), ("a", "b"))


def test_json_holds_plain_values() -> None:
    assert json.loads(Manifest(sites=[4, 2]).to_json())["sites"] == [4, 2]
