"""The errors that voxelmat raises: each says what is wrong, what was given and what to do."""

from __future__ import annotations

from collections.abc import Sequence

__all__ = [
    "Cancelled",
    "ConvergenceError",
    "FileFormatError",
    "InputError",
    "ResourceError",
    "VoxelmatError",
]


class VoxelmatError(Exception):
    """Base of every error that voxelmat raises on purpose."""


class InputError(VoxelmatError, ValueError):
    """A value, a file's content or a combination of inputs that cannot be worked with.

    Parameters
    ----------
    message : str
        What is wrong, what was given, what to do.
    file : str, optional
        The file that the value came from.
    key : str, optional
        The dotted key inside that file, for example ``load_case[0].support[1].region``.
    """

    def __init__(self, message: str, *, file: str | None = None, key: str | None = None) -> None:
        self.message = message
        self.file = file
        self.key = key
        place = ": ".join(p for p in (file, key) if p)
        super().__init__(f"{place}: {message}" if place else message)


class FileFormatError(VoxelmatError, ValueError):
    """A file that is not what it claims to be, is cut short, or is unsafe to open."""


class ConvergenceError(VoxelmatError, RuntimeError):
    """An iteration that did not reach its tolerance; carries the residual history."""

    def __init__(self, message: str, history: Sequence[float] = ()) -> None:
        super().__init__(message)
        self.history = tuple(float(r) for r in history)


class ResourceError(VoxelmatError, RuntimeError):
    """A disk that is full, a folder in use or not writable, memory that would not suffice."""


class Cancelled(VoxelmatError):
    """The user asked to stop; what was finished before is kept."""
