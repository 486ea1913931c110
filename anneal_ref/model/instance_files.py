"""The JSON file of an instance: version, keys, and errors that name the file and the key."""

from __future__ import annotations

import difflib
import json
import os
import secrets
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from anneal_ref.base.errors import InputError, in_words

FORMAT = "anneal_ref instance"
VERSION = 1
_KINDS = {
    "name": (str,),
    "lattice": (str,),
    "n_sites": (int,),
    "edges": (list,),
    "couplings": (list,),
    "fields": (list, type(None)),
    "transverse": (list, type(None)),
    "labels": (list, type(None)),
    "coordinates": (list, type(None)),
    "recipe": (dict, type(None)),
}
_NEEDED = ("n_sites", "edges", "couplings")
_DEFAULTS: dict[str, Any] = {"name": None, "lattice": "graph"}
_WORDS = {str: "a string", int: "a whole number", list: "a list", dict: "a table", type(None): "null"}


def write_instance(path: str | os.PathLike[str], content: Mapping[str, Any], identity: str) -> None:
    """Write the file aside and put it in place in one move."""
    document = {"format": FORMAT, "version": VERSION, **content, "identity": identity}
    lines = [f"{json.dumps(key)}: {json.dumps(value, allow_nan=False)}" for key, value in document.items()]
    target = Path(path)
    part = target.with_name(f"{target.name}.{os.getpid()}-{secrets.token_hex(4)}.part")
    try:
        part.write_text("{\n" + ",\n".join(lines) + "\n}\n", encoding="utf-8")
        os.replace(part, target)
    except OSError as error:
        raise InputError(
            f"cannot write {target}: {in_words(error)}; choose a folder that exists and may be written"
        ) from error
    finally:
        part.unlink(missing_ok=True)


def read_instance(path: str | os.PathLike[str]) -> tuple[dict[str, Any], str | None]:
    """Read the file and check its keys; return the content and the identity that stands in it.

    Only `n_sites`, `edges` and `couplings` are needed, so that a file can be written by hand.
    """
    name = os.fspath(path)
    document = _document(Path(path))
    version = document.pop("version", None)
    if document.pop("format", None) != FORMAT or not isinstance(version, int):
        raise InputError(f'{name}: an instance file must begin with "format": "{FORMAT}", "version": {VERSION}')
    if version > VERSION:
        raise InputError(f"{name}: `version` is {version}, this library reads up to {VERSION}; install a later one")
    identity = document.pop("identity", None)
    if identity is not None and not isinstance(identity, str):
        raise InputError(f"{name}: `identity` must be a string; got {identity!r}")
    for key in document:
        if key not in _KINDS:
            near = difflib.get_close_matches(key, _KINDS, n=1)
            hint = f"; did you mean `{near[0]}`?" if near else ""
            raise InputError(f"{name}: unknown key `{key}`; allowed are {', '.join([*_KINDS, 'identity'])}{hint}")
    for key in _NEEDED:
        if key not in document:
            raise InputError(f"{name}: the key `{key}` is missing")
    for key, value in document.items():
        if not isinstance(value, _KINDS[key]) or isinstance(value, bool):
            kinds = " or ".join(_WORDS[kind] for kind in _KINDS[key])
            raise InputError(f"{name}: `{key}` must be {kinds}; got {json.dumps(value)[:60]}")
    return {key: document.get(key, _DEFAULTS.get(key)) for key in _KINDS}, identity


def _document(path: Path) -> dict[str, Any]:
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError as error:
        raise InputError(f"there is no instance file {path}") from error
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"the instance file {path} cannot be read: {in_words(error)}") from error
    try:
        document = json.loads(text, object_pairs_hook=_without_repeats)
    except json.JSONDecodeError as error:
        raise InputError(
            f"{path}, line {error.lineno}, column {error.colno}: not JSON, or cut short ({error.msg})"
        ) from error
    except InputError as error:
        raise InputError(f"{path}: {error}") from error
    if not isinstance(document, dict):
        raise InputError(f"{path}: an instance file must hold a JSON object; got a {type(document).__name__}")
    return document


def _without_repeats(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) < len(pairs):
        keys = [key for key, _ in pairs]
        raise InputError(f"the key `{next(key for key in keys if keys.count(key) > 1)}` stands there twice")
    return result
