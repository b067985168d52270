"""What can go wrong, as one tree of exceptions.

    FoldwrightError
    |-- InputError       the design, the technology or the command line cannot be used   exit 2
    |-- AuditError       a plan does not stand up to its checks                           exit 5
    `-- SolverError      the solver is missing, died or printed what nobody can read      exit 1

Only the command line turns them into exit codes.
"""

from __future__ import annotations


class FoldwrightError(Exception):
    """Anything this package raises on purpose; `str()` is one sentence for the user."""


class InputError(FoldwrightError):
    """Input that cannot be used: where it stands, what is wrong, and a way out.

    Args:
        what: the fault, without a full stop ("signal 'w' is used but never defined").
        place: file, key, line or column; empty where there is none.
        remedy: what the user can do about it; empty where it is plain.
    """

    def __init__(self, what: str, *, place: str = "", remedy: str = "") -> None:
        self.what = what
        self.place = place
        self.remedy = remedy
        super().__init__(what)

    def __str__(self) -> str:
        head = f"{self.place}: " if self.place else ""
        tail = f"; {self.remedy}" if self.remedy else ""
        return f"{head}{self.what}{tail}"

    def within(self, place: str) -> InputError:
        """The same fault, with the place it lies in put in front (a file around a line)."""
        inner = f"{place}: {self.place}" if self.place else place
        return InputError(self.what, place=inner, remedy=self.remedy)


class AuditError(FoldwrightError):
    """A plan that does not stand; the message names the first check that failed."""


class SolverError(FoldwrightError):
    """The solver is missing, died, or printed what nobody can read."""
