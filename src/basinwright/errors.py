"""Every error that basinwright raises on purpose, and what each one means to the person who reads it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


class BasinwrightError(Exception):
    """Base of all errors raised on purpose: its text is meant for the user, never a traceback.

    Examples
    --------
    >>> issubclass(InputRejected, BasinwrightError) and issubclass(PublishError, BasinwrightError)
    True
    """


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with the input, and how to mend it.

    Parameters
    ----------
    file : str
        The file the user should open.
    field : str
        The key, column, row or layer in it.
    what : str
        What is wrong.
    fix : str
        How to mend it.
    """

    file: str
    field: str
    what: str
    fix: str

    def __str__(self) -> str:
        return ": ".join(" ".join(part.split()) for part in (self.file, self.field, self.what, self.fix))


class InputRejected(BasinwrightError):  # noqa: N818 - the event, as the user meets it
    """The input cannot be computed: every problem that could be known beforehand, all at once (exit 2).

    Examples
    --------
    >>> print(InputRejected.one("project.toml", "terrain.dem", "missing", "name the raster"))
    project.toml: terrain.dem: missing: name the raster
    """

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = list(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))

    @classmethod
    def one(cls, file: str, field: str, what: str, fix: str) -> InputRejected:
        """Reject the input for a single problem."""
        return cls([Problem(file, field, what, fix)])


class GridError(BasinwrightError):
    """Rasters or coordinates that do not belong to one grid."""


class TerrainError(BasinwrightError):
    """Terrain that could not be routed: a broken invariant (undrained cells, a cycle), never expected."""


class RangeError(BasinwrightError, ValueError):
    """A number that a formula cannot take at all: negative length, NaN, a curve number over 100."""


class PublishError(BasinwrightError):
    """The results could not be put in place: no space, no permission, another run at work (nothing changed).

    Examples
    --------
    >>> print(PublishError("out: folder: cannot be written (No space left on device): make room"))
    out: folder: cannot be written (No space left on device): make room
    """
