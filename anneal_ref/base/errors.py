"""The one small family of errors, and the one warning.

Every class is also the built-in type a caller would expect to catch, and every one survives a pickle,
so that it can come back from a worker process with what it carries.
"""

from __future__ import annotations

import errno
from typing import Any


class AnnealRefError(Exception):
    """Base of every error that the package raises on purpose."""

    _carries: tuple[str, ...] = ()

    def __reduce__(self) -> tuple[Any, ...]:
        """Rebuild from the message and put back what the error carries."""
        return _rebuild, (type(self), str(self), {name: getattr(self, name) for name in self._carries})


def _rebuild(kind: type[AnnealRefError], message: str, carried: dict[str, Any]) -> AnnealRefError:
    return kind(message, **carried)


class InputError(AnnealRefError, ValueError):
    """A value that was given is not allowed; the message says what is."""


class StudyError(AnnealRefError, ValueError):
    """A study file says something that is not allowed; the message names the file and the key."""


class NotSupported(AnnealRefError, ValueError):
    """A back-end cannot treat this anneal.

    Attributes
    ----------
    alternatives : tuple of str
        Back-ends or settings that would do.
    """

    _carries = ("alternatives",)

    def __init__(self, message: str, alternatives: tuple[str, ...] = ()) -> None:
        super().__init__(message)
        self.alternatives = alternatives


class TooLarge(AnnealRefError, MemoryError):
    """The work needs more memory than there is; raised before any is allocated.

    Attributes
    ----------
    needed_bytes, available_bytes : int
        What the work needs and what the machine has free.
    alternatives : tuple of str
        Back-ends or settings that would do.
    """

    _carries = ("needed_bytes", "available_bytes", "alternatives")

    def __init__(
        self, message: str, needed_bytes: int, available_bytes: int, alternatives: tuple[str, ...] = ()
    ) -> None:
        super().__init__(message)
        self.needed_bytes = needed_bytes
        self.available_bytes = available_bytes
        self.alternatives = alternatives


class NotConverged(AnnealRefError, RuntimeError):
    """A computation ended before it met its tolerance.

    Attributes
    ----------
    result : object
        The best result there is, with its error.
    """

    _carries = ("result",)

    def __init__(self, message: str, result: object = None) -> None:
        super().__init__(message)
        self.result = result


class ArchiveError(AnnealRefError, OSError):
    """A file of the archive cannot be written, or cannot be trusted.

    Attributes
    ----------
    path : str
        The file or folder.
    problem : str
        What is wrong with it, in a few words.
    """

    _carries = ("path", "problem")

    def __init__(self, message: str, path: str, problem: str) -> None:
        super().__init__(message)
        self.path = path
        self.problem = problem

    def __str__(self) -> str:
        """Return the message alone, not the errno form of `OSError`."""
        return str(self.args[0]) if self.args else ""


class AnnealRefWarning(UserWarning):
    """The one warning class: the result stands, but the user should know."""


_WORDS = {
    errno.EISDIR: "it is a folder, not a file",
    errno.ENOTDIR: "a part of the path is not a folder",
    errno.EEXIST: "something of that name is there already",
    errno.ENOENT: "there is no such file or folder",
    errno.EACCES: "permission is denied",
    errno.EPERM: "permission is denied",
    errno.EROFS: "it lies on a read-only disk",
    errno.ENOSPC: "the disk is full",
    errno.EDQUOT: "the quota of the disk is used up",
    errno.ENAMETOOLONG: "the name is too long",
    errno.ELOOP: "its links go round in a circle",
    errno.EIO: "the disk reports an error",
}


def in_words(error: OSError | UnicodeDecodeError) -> str:
    """Return what went wrong with a file, in words that fit into a sentence.

    Examples
    --------
    >>> in_words(IsADirectoryError(errno.EISDIR, "Is a directory", "truth"))
    'it is a folder, not a file'
    """
    if isinstance(error, UnicodeDecodeError):
        return f"it is not text in UTF-8 (byte {error.start})"
    return _WORDS.get(error.errno or 0) or error.strerror or str(error) or type(error).__name__
