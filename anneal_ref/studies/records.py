"""How a reference lies in its file: few arrays, few attributes for whoever looks, the recipe that makes it again.

Arrays (dimensions):

- `z`, `x` (run, site) and `zz` (run, site, other_site): moments of the runs, in the order in which they were made;
- `z_num`, `x_num` (site) and `zz_num` (site, other_site): measured errors of the run whose numbers are reported;
- `second_z`, `second_zz`, `second_x` and their `_num`: the second opinion, if there is one;
- `probabilities` (configuration): up to 16 sites; only the half with the last spin up where the other half mirrors it;
- `samples` (sample, byte): packed bits, site 0 lowest, bit 0 for +1;
- `recipe` (character): JSON text in UTF-8 with anneal, back-end, ledgers, ground energy and provenance.
"""

from __future__ import annotations

import dataclasses
import json
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from anneal_ref.backends.contract import Backend
from anneal_ref.backends.exact.state_vector import StateVector
from anneal_ref.backends.fermions.free_fermions import FreeFermions
from anneal_ref.backends.mps.mps import MPS
from anneal_ref.base.checks import frozen
from anneal_ref.base.errors import AnnealRefWarning, ArchiveError, InputError
from anneal_ref.base.estimate import Estimate
from anneal_ref.base.storage import Record
from anneal_ref.ground.ground import GroundEnergy
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe.moments import Moments
from anneal_ref.truth.evolutions import Evolution
from anneal_ref.truth.opinions import Opinion
from anneal_ref.truth.reference import Reference
from anneal_ref.truth.refining import Budget

KIND = "reference"
VERSION = 1

BACKENDS: dict[str, Any] = {"StateVector": StateVector, "FreeFermions": FreeFermions, "MPS": MPS}
"""Back-ends whose references can be read back, by class name."""

_DIMS = {
    "z": ("run", "site"),
    "zz": ("run", "site", "other_site"),
    "x": ("run", "site"),
    "z_num": ("site",),
    "zz_num": ("site", "other_site"),
    "x_num": ("site",),
    "second_z": ("site",),
    "second_zz": ("site", "other_site"),
    "second_x": ("site",),
    "second_z_num": ("site",),
    "second_zz_num": ("site", "other_site"),
    "second_x_num": ("site",),
    "probabilities": ("configuration",),
    "samples": ("sample", "byte"),
    "recipe": ("character",),
}


def to_record(reference: Reference) -> Record:
    """Return the record of a reference."""
    runs = reference.runs
    moments = reference.moments()
    second = None if reference.second is None else reference.second.moments
    arrays: dict[str, NDArray[Any] | None] = {
        "z": np.stack([run.moments.z.value for run in runs]),
        "zz": np.stack([run.moments.zz.value for run in runs]),
        "x": None if moments.x is None else np.stack([_x(run) for run in runs]),
        "z_num": moments.z.num,
        "zz_num": moments.zz.num,
        "x_num": None if moments.x is None else moments.x.num,
        "second_z": None if second is None else second.z.value,
        "second_zz": None if second is None else second.zz.value,
        "second_x": None if second is None or second.x is None else second.x.value,
        "second_z_num": None if second is None else second.z.num,
        "second_zz_num": None if second is None else second.zz.num,
        "second_x_num": None if second is None or second.x is None else second.x.num,
        "probabilities": reference.folded,
        "samples": reference.bits,
        "recipe": np.frombuffer(json.dumps(_recipe(reference), allow_nan=False).encode(), dtype=np.uint8),
    }
    attributes: dict[str, str | int | float] = {
        "kind": KIND,
        "version": VERSION,
        "identity": reference.identity,
        "anneal": reference.anneal.identity,
        "instance": reference.anneal.instance.identity,
        "n_sites": reference.n_sites,
        "duration": reference.anneal.duration,
        "tolerance": reference.tolerance,
        "error": reference.error,
        "outcome": reference.outcome,
    }
    kept = {name: array for name, array in arrays.items() if array is not None}
    return Record(attributes, kept, {name: _DIMS[name] for name in kept})


def from_record(record: Record, path: Path) -> Reference:
    """Return the reference of a record that was read from `path`.

    Raises
    ------
    ArchiveError
        The record holds something else, is newer than this library, or was made by a back-end that it does not have.
    """
    kind, version = record.attributes.get("kind"), record.attributes.get("version")
    if kind != KIND:
        raise _refused(path, f"it holds {kind}, not a reference", "take it out of the folder")
    if version != VERSION:
        raise _refused(path, f"its reference is of version {version}, this library reads {VERSION}", _OTHER_LIBRARY)
    try:
        recipe = json.loads(record.arrays["recipe"].tobytes())
        for made_by in (recipe["backend"], *([recipe["second"]["backend"]] if recipe["second"] else [])):
            if made_by["class"] not in BACKENDS:
                problem = f"it was made by the back-end {made_by['class']}, which this library does not have"
                raise _refused(path, problem, _OTHER_LIBRARY)
        reference = _rebuilt(record, recipe)
    except (KeyError, TypeError, ValueError, IndexError) as error:
        problem = f"its contents do not make a reference ({type(error).__name__}: {error})"
        raise _refused(path, problem, "restore it from a copy, or compute it again") from error
    if reference.identity != record.attributes.get("identity"):
        raise _refused(
            path,
            f"its identity is {record.attributes.get('identity')}, its contents have {reference.identity}",
            "restore it from a copy, or compute it again",
        )
    return reference


_OTHER_LIBRARY = "install the library version that wrote it"


def _recipe(reference: Reference) -> dict[str, Any]:
    ground = reference.ground
    return {
        "anneal": reference.anneal.to_dict(),
        "backend": _settings(reference.backend),
        "tolerance": reference.tolerance,
        "seed": reference.seed,
        "max_runs": reference.max_runs,
        "budget": dataclasses.asdict(reference.budget),
        "stopped": reference.stopped,
        "runs": [
            {"ledger": dict(run.ledger), "refined": dict(run.refined), "reordered": run.reordered}
            for run in reference.runs
        ],
        "second": None
        if (second := reference.second) is None
        else {
            "backend": _settings(second.backend),
            "outcome": second.outcome,
            "worst": second.worst,
            "outside": second.outside,
            "how": second.moments.zz.how,
        },
        "how": reference.moments().zz.how,
        "ground": {
            field.name: value.tolist() if isinstance(value := getattr(ground, field.name), np.ndarray) else value
            for field in dataclasses.fields(ground)
        },
        "provenance": dict(reference.provenance),
    }


def _settings(backend: Backend) -> dict[str, Any]:
    if not dataclasses.is_dataclass(backend) or isinstance(backend, type):
        raise InputError(f"only a back-end that is a dataclass can be archived; got {backend}")
    return {"class": type(backend).__name__, "settings": dataclasses.asdict(backend)}


def _made(settings: Mapping[str, Any]) -> Backend:
    return BACKENDS[settings["class"]](**_plain(settings["settings"]))  # type: ignore[no-any-return]


def _plain(content: Mapping[str, Any]) -> dict[str, Any]:
    """Put tuples back, which JSON does not have."""
    return {name: tuple(value) if isinstance(value, list) else value for name, value in content.items()}


def _rebuilt(record: Record, recipe: Mapping[str, Any]) -> Reference:
    arrays = record.arrays
    with warnings.catch_warnings():
        # whoever made the anneal was warned then
        warnings.simplefilter("ignore", AnnealRefWarning)
        anneal = Anneal.from_dict(recipe["anneal"])
    x = arrays.get("x")
    runs = tuple(
        Evolution(
            Moments.of(z, zz, None if x is None else x[k], recipe["how"]),
            _plain(kept["ledger"]),
            kept["refined"],
            kept["reordered"],
        )  # fmt: skip
        for k, (z, zz, kept) in enumerate(zip(arrays["z"], arrays["zz"], recipe["runs"], strict=True))
    )
    second = None
    if (other := recipe["second"]) is not None:
        z, zz, x2 = (
            None if f"second_{name}" not in arrays
            else Estimate(arrays[f"second_{name}"], 0.0, arrays[f"second_{name}_num"], other["how"])
            for name in ("z", "zz", "x")
        )  # fmt: skip
        assert z is not None
        assert zz is not None
        second = Opinion(
            _made(other["backend"]), other["outcome"], Moments(z, zz, x2), other["worst"], other["outside"]
        )
    ground = {**recipe["ground"], "spins": frozen(np.array(recipe["ground"]["spins"], dtype=np.int8))}
    return Reference(
        anneal=anneal,
        backend=_made(recipe["backend"]),
        tolerance=recipe["tolerance"],
        seed=recipe["seed"],
        max_runs=recipe["max_runs"],
        budget=Budget(**recipe["budget"]),
        runs=runs,
        bits=arrays["samples"],
        folded=arrays.get("probabilities"),
        ground=GroundEnergy(**ground),
        stopped=recipe["stopped"],
        second=second,
        provenance=recipe["provenance"],
    )


def _x(run: Evolution) -> NDArray[np.float64]:
    assert run.moments.x is not None
    return run.moments.x.value


def _refused(path: Path, problem: str, advice: str) -> ArchiveError:
    return ArchiveError(f"cannot use {path}: {problem}; {advice}", path=str(path), problem=problem)
