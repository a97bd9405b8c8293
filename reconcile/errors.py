"""Errors a user can cause, as one tree.

::

    ReconcileError                 never raised itself
    ├── InputError       exit 3    a document or a table cannot be used; holds every problem found
    └── EstimateError    exit 4    the evidence carries no usable estimate

Every other exception is a defect of this program and keeps its traceback. Usage errors of the
command line are click's own (exit 2).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar

if TYPE_CHECKING:
    from collections.abc import Iterable

__all__ = ["EstimateError", "InputError", "Problem", "ReconcileError"]


@dataclass(frozen=True, slots=True, order=True)
class Problem:
    r"""One thing wrong with an input, in the words a user needs to mend it.

    Parameters
    ----------
    file : str
        The file as the user named it.
    line : int
        1-based line in that file; 0 where a line means nothing.
    place : str
        Key path (``osmometry[0].u_reading``) or cell (``column 'c', row 3``).
    text : str
        What was found and what was expected.
    remedy : str
        What to do; may be empty where ``text`` already says it.

    Examples
    --------
    >>> print(Problem("case.toml", 7, "sample.name", "is missing", "add a name"))
    case.toml:7: sample.name: is missing
      add a name
    """

    file: str
    line: int
    place: str
    text: str
    remedy: str = ""

    def __str__(self) -> str:
        where = f"{self.file}:{self.line}" if self.line else self.file
        head = ": ".join(part for part in (where, self.place, self.text) if part)
        return f"{head}\n  {self.remedy}" if self.remedy else head


class ReconcileError(Exception):
    """Root of the errors above; catch this to catch them all."""

    exit_code: ClassVar[int] = 1


class InputError(ReconcileError):
    """The input cannot be used.

    Parameters
    ----------
    problems : iterable of Problem
        All of them, not the first only.
    """

    exit_code: ClassVar[int] = 3

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(sorted(set(problems)))
        super().__init__("\n".join(str(problem) for problem in self.problems))


class EstimateError(ReconcileError):
    """The evidence does not carry an estimate of the distribution; the text says why."""

    exit_code: ClassVar[int] = 4
