"""From patterns and paths to the samples of a case: which files there are, and what is wrong with them."""

from __future__ import annotations

import hashlib
import warnings
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Literal

from anneal_ref.base.errors import AnnealRefWarning, InputError, StudyError
from anneal_ref.model.anneal import Anneal
from anneal_ref.observe import reading
from anneal_ref.observe.samples import Samples, join, uneven

Values = Literal["spins", "bits"] | None


def find_files(
    patterns: Sequence[str], name: str, duration: float, path: Path, where: str
) -> tuple[tuple[Path, ...], tuple[str, ...]]:
    """Return the samples files of one case, and a sentence for each pattern that no file fits (yet).

    Parameters
    ----------
    patterns : sequence of str
        Relative to the folder of the study, with {instance} and {duration} in them.
    name, duration : str, float
        Of the case.
    path, where : Path, str
        Study file and key, for messages.

    Raises
    ------
    StudyError
        Another field in a pattern; a file that two patterns name.
    """
    found: dict[Path, str] = {}
    missing = []
    for pattern in patterns:
        spelled = pattern.replace("{instance}", name).replace("{duration}", f"{duration:g}")
        if "{" in spelled or "}" in spelled:
            raise StudyError(
                f"{path}: `{where}` = '{pattern}': the fields of a pattern are {{instance}} and {{duration}}"
            )
        wild = any(letter in spelled for letter in "*?[")
        whole = path.parent / spelled
        matches = _glob(path.parent, spelled) if wild else [whole] if whole.is_file() else []
        if not matches:
            what = "no samples file matches" if wild else "there is no samples file"
            missing.append(f"{path}: `{where}`: {what} {whole}, needed for '{name}' at duration {duration:g}")
        for match in matches:
            if match in found:
                raise StudyError(
                    f"{path}: `{where}`: {match} is named twice, by '{found[match]}' and by '{pattern}'; the same "
                    "shots must not count twice"
                )
            found[match] = pattern
    return tuple(found), tuple(missing)


def refuse_copies(paths: Iterable[str | Path]) -> None:
    """Refuse files that are the same byte for byte: shots that are counted twice look like less noise than there is.

    Raises
    ------
    InputError
        Names both files.
    """
    seen: dict[str, Path] = {}
    for path in map(Path, paths):
        # what is wrong with a missing or empty file is said by whoever reads it
        if not path.is_file() or path.stat().st_size == 0:
            continue
        beside = reading.sidecar(path)
        content = path.read_bytes() + (beside.read_bytes() if beside.is_file() else b"")
        first = seen.setdefault(hashlib.sha256(content).hexdigest(), path)
        if first is not path:
            same = "are one file" if first.resolve() == path.resolve() else "are the same byte for byte"
            raise InputError(
                f"{first} and {path} {same}; the same shots must not count twice, so leave one of them out, "
                "or, if they are runs of their own, give each its batch in its manifest"
            )


def read_with_note(
    paths: Sequence[str | Path], anneal: Anneal, values: Values = None, values_by: str = "the argument `values`"
) -> tuple[Samples, str | None]:
    """Return what `read_samples` does, and instead of its warning what it says."""
    refuse_copies(paths)
    runs = []
    for path in paths:
        run = Samples(*reading.read(Path(path), values, values_by=values_by))
        try:
            runs.append(run.for_anneal(anneal))
        except InputError as error:
            raise InputError(f"{path}: {error}") from error
    try:
        return join(runs), uneven(runs, [Path(path).name for path in paths])
    except InputError as error:
        raise InputError(f"{paths[0]} and the files given with it do not go together: {error}") from error


def read_samples(
    paths: Sequence[str | Path], anneal: Anneal, values: Values = None, values_by: str = "the argument `values`"
) -> Samples:
    """Read samples files of one anneal, hold each against it, and put them together; each is a gauge or batch.

    Parameters
    ----------
    paths : sequence of path
    anneal : Anneal
    values : {"spins", "bits"}, optional
        What the files hold that do not say.
    values_by : str
        What messages call the place where `values` was said.

    Raises
    ------
    InputError
        Names the file; also files that are the same byte for byte.

    Warns
    -----
    AnnealRefWarning
        Some files give a gauge (or a batch) and others none.
    """
    samples, note = read_with_note(paths, anneal, values, values_by)
    if note:
        warnings.warn(note, AnnealRefWarning, stacklevel=2)
    return samples


def _glob(folder: Path, pattern: str) -> list[Path]:
    anchor = Path(Path(pattern).anchor)
    root, rest = (anchor, str(Path(pattern).relative_to(anchor))) if Path(pattern).is_absolute() else (folder, pattern)
    # a manifest lies beside its samples and is no samples file itself
    return sorted(match for match in root.glob(rest) if match.is_file() and not match.name.endswith(".manifest.json"))
