"""`Run`: how a computation is carried out, never what it yields: threads and progress."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from anneal_ref.base.checks import integer


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

    Examples
    --------
    >>> with Run(progress=False).track(2, "layers") as bar:
    ...     bar.update(2)
    """

    threads: int = 1
    progress: bool | None = None

    def __post_init__(self) -> None:
        """Check the settings."""
        object.__setattr__(self, "threads", integer("threads", self.threads, low=1))

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
