"""The family of errors a user can cause, each with its own process exit code.

Every class derives from :class:`ElbowroomError` and from the builtin a caller would expect, so that a
notebook's ``except ValueError`` works.  The command line prints the message and exits with ``exit_code``;
code 1 is left for unforeseen errors, which keep their traceback.
"""

from __future__ import annotations

from pathlib import Path


class ElbowroomError(Exception):
    """Base of every error raised on purpose; never raised itself."""

    exit_code = 1


class JobFileError(ElbowroomError, ValueError):
    """A job, antenna or layout file says something that cannot be used.

    Parameters
    ----------
    message : str
        What is wrong, or several lines of it.
    file : str or Path, optional
        The file at fault.
    problems : sequence of str, optional
        All problems found in that file, one line each, shown together.
    """

    exit_code = 2

    def __init__(self, message: str, *, file: str | Path | None = None, problems: tuple[str, ...] = ()) -> None:
        self.file = None if file is None else str(file)
        self.problems = tuple(problems)
        head = message if file is None else f"{file}: {message}"
        super().__init__("\n".join([head, *(f"  - {p}" for p in self.problems)]))


class GeometryError(ElbowroomError, ValueError):
    """Wires, antennas or stations that cannot exist or cannot be modelled."""

    exit_code = 3

    def __init__(self, message: str, *, problems: tuple[str, ...] = ()) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join([message, *(f"  - {p}" for p in self.problems)]))


class ModelRangeError(ElbowroomError, ValueError):
    """A value outside the range in which the model holds."""

    exit_code = 4


class SolveError(ElbowroomError, RuntimeError):
    """The linear system could not be solved to the accuracy claimed."""

    exit_code = 5


class StoreError(ElbowroomError, OSError):
    """The store cannot be read or written.

    Parameters
    ----------
    message : str
        What happened.
    path : str or Path, optional
        The file or folder concerned.
    """

    exit_code = 6

    def __init__(self, message: str, *, path: str | Path | None = None) -> None:
        self.path = None if path is None else str(path)
        super().__init__(message if path is None else f"{path}: {message}")


class ExportError(ElbowroomError, ValueError):
    """A table or picture that cannot be written."""

    exit_code = 7


class ResourceError(ElbowroomError, MemoryError):
    """A job that needs more memory or disk than there is; raised before any work starts."""

    exit_code = 8


class ModelRangeWarning(UserWarning):
    """Inside the hard limits of the model, outside the recommended ones."""
