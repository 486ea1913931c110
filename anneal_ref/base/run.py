"""`Run`: how a computation is carried out, never what it yields: threads, progress and checkpoints."""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from anneal_ref.base.checks import integer, number
from anneal_ref.base.errors import ArchiveError, InputError, in_words


class Bar:
    """A progress bar, or its silent twin when nobody watches."""

    def __init__(self, inner: Any = None) -> None:
        self._inner = inner

    def update(self, n: float = 1, note: str = "") -> None:
        """Advance by `n` units and show a short note beside the bar."""
        if self._inner is not None:
            if note:
                self._inner.set_postfix_str(note, refresh=False)
            self._inner.update(n)


@dataclass(frozen=True, slots=True)
class Run:
    """Settings of a run that cannot change its digits.

    Parameters
    ----------
    threads : int
        Threads that a back-end may use; 1 by default, because parallelism is the caller's.
    progress : bool, optional
        Show progress bars on standard error; by default only if it is a terminal.
    checkpoint : path, optional
        A file that the computation keeps its state in, and continues from when it is started again: with the same
        settings, to the same result. When it is done its last state stays there, so that asking once more is free;
        `forget` removes it. Only computations that say so write one; the others refuse it.
    every : float
        Seconds between two writes of that file; 0 writes after every step.

    Raises
    ------
    InputError
        A setting outside its range, or a checkpoint that is no name of a file.

    Examples
    --------
    >>> with Run(progress=False).track(2, "layers") as bar:
    ...     bar.update(2)

    A computation of several parts keeps each in a file of its own.

    >>> Run(checkpoint="run.h5").part("fine").checkpoint
    'run-fine.h5'
    """

    threads: int = 1
    progress: bool | None = None
    checkpoint: str | os.PathLike[str] | None = None
    every: float = 600.0

    def __post_init__(self) -> None:
        """Check the settings."""
        object.__setattr__(self, "threads", integer("threads", self.threads, low=1))
        object.__setattr__(self, "every", number("every", self.every, low=0.0, unit="s"))
        if self.checkpoint is not None:
            object.__setattr__(self, "checkpoint", _file_name(self.checkpoint))

    def part(self, name: str) -> Run:
        """Return the run of one part of a computation, with a checkpoint of its own: `-name` behind the stem.

        Parameters
        ----------
        name : str
            Letters, digits, dots, hyphens and underscores.

        Raises
        ------
        InputError
            Other characters, or none.
        """
        if not isinstance(name, str) or not re.fullmatch(r"[\w.-]+", name, re.ASCII):
            raise InputError(f"name must be made of letters, digits, dots, hyphens and underscores; got {name!r}")
        if self.checkpoint is None:
            return self
        path = Path(self.checkpoint)
        return replace(self, checkpoint=path.with_name(f"{path.stem}-{name}{path.suffix}"))

    def forget(self) -> None:
        """Remove the checkpoint, if there is one.

        Raises
        ------
        ArchiveError
            The file cannot be removed.
        """
        if self.checkpoint is not None:
            try:
                Path(self.checkpoint).unlink(missing_ok=True)
            except OSError as error:
                problem = in_words(error)
                raise ArchiveError(
                    f"cannot remove the checkpoint {self.checkpoint}: {problem}; remove it by hand",
                    path=str(self.checkpoint),
                    problem=problem,
                ) from error

    @property
    def shows_progress(self) -> bool:
        """Whether bars are drawn."""
        return sys.stderr.isatty() if self.progress is None else self.progress

    @contextmanager
    def track(self, total: float, label: str) -> Iterator[Bar]:
        """Give a progress bar over `total` units of work; it vanishes when the work ends."""
        if not self.shows_progress:
            yield Bar()
            return
        from tqdm import tqdm

        with tqdm(
            total=total,
            desc=label,
            leave=False,
            bar_format="{desc}: {percentage:3.0f}%|{bar}| {remaining} left {postfix}",
        ) as inner:
            yield Bar(inner)


def _file_name(path: Any) -> str:
    name = os.fspath(path) if isinstance(path, str | os.PathLike) else path
    if not isinstance(name, str) or "\0" in name or Path(name).name in ("", "..") or name.endswith(("/", os.sep)):
        raise InputError(f"checkpoint must be the path of a file, such as 'run.h5'; got {path!r}")
    return name
