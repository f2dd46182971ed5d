"""What went wrong, where, and what to do about it.

OutletError                 anything the user can mend; two lines, exit code 2
├── UnitFileError           the unit file: all problems at once, each with its key
├── ExportError             one export cannot be read; the others go on
├── StoreError              the store is locked, damaged, or not ours
│   └── GoneError           a part is no longer there: a later pass has replaced it, or it was lost
└── BalanceError            the unit as described cannot be reconciled
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ingest.shown import shown


@dataclass(frozen=True, slots=True)
class Problem:
    """One fault of a unit file: where it stands (dotted key), what is wrong, what to write instead."""

    where: str
    what: str
    remedy: str


class OutletError(Exception):
    """Something the user can mend: what, where, and what to do.

    Parameters
    ----------
    what : str
        One line that begins with the place, `march.csv:4182 [AI-204]: 'n.a.' is not a number`.
    remedy : str
        One line in the imperative.
    """

    def __init__(self, what: str, *, remedy: str) -> None:
        """Keep the fault and its remedy apart."""
        super().__init__(what)
        self.what = what
        self.remedy = remedy

    def __str__(self) -> str:
        """Give both lines, the remedy indented under the fault."""
        return f"{self.what}\n  {self.remedy}"


class UnitFileError(OutletError):
    """The unit file has faults; all of them are listed, not only the first.

    Parameters
    ----------
    file : str
        The unit file as the user named it.
    problems : sequence of Problem
        At least one.
    """

    def __init__(self, file: str, problems: Sequence[Problem]) -> None:
        """List one problem a line under the file's name."""
        count = f"{len(problems)} problem{'s' if len(problems) != 1 else ''}"
        lines = [f"  {p.where}: {p.what}; {p.remedy}" for p in problems]
        super().__init__("\n".join([f"{file}: {count}", *lines]), remedy="Mend what is named above.")
        self.problems = tuple(problems)


class ExportError(OutletError):
    """One export cannot be read; it is set aside with this message and the others go on.

    Parameters
    ----------
    what, remedy : str
        What they hold of the export is shown as text of one line, whatever stands in it.
    """

    def __init__(self, what: str, *, remedy: str) -> None:
        """Keep two lines, two lines."""
        super().__init__(shown(what), remedy=shown(remedy))


class StoreError(OutletError):
    """The store is locked, damaged, of another version, or not ours."""


class GoneError(StoreError):
    """A part is no longer there: a later pass has replaced it, or it was lost."""


class BalanceError(OutletError):
    """The unit as described cannot be reconciled."""
