"""What is wrong with a study's files: every problem at once, each with its place and its mend."""

import difflib
from collections.abc import Iterable
from dataclasses import dataclass

from evenblur.errors import InputError
from evenblur.printable import printable

_LONGEST = 300


@dataclass(frozen=True)
class Problem:
    """One thing to mend: file, row (line of the file), column or key, what was found, what to do."""

    file: str
    row: int | None
    column: str | None
    found: str
    mend: str

    def __str__(self) -> str:
        place = self.file
        place += f", row {self.row}" if self.row is not None else ""
        place += f", {_shown(self.column)}" if self.column else ""
        return f"{place}: {_shown(self.found)}; {_shown(self.mend)}"


def _shown(text: str) -> str:
    """Text that may quote a file: in one line, of bearable length, with nothing in it that a terminal would obey."""
    plain = printable(text)
    return plain if len(plain) <= _LONGEST else f"{plain[: _LONGEST - 4]} ..."


class StudyError(InputError):
    """The study's files cannot be used; `problems` lists everything that was found."""

    def __init__(self, problems: list[Problem]) -> None:
        first = problems[0]
        super().__init__(first.file, first.found, first.mend)
        self.problems = problems

    def __str__(self) -> str:
        return "\n".join(str(problem) for problem in self.problems)


def nearest(name: str, known: Iterable[str]) -> str:
    """The end of a mend that names the nearest known name, or the known names where none is near."""
    names = sorted(known)
    close = difflib.get_close_matches(name.lower(), [known_name.lower() for known_name in names], n=1, cutoff=0.5)
    if close:
        original = next(known_name for known_name in names if known_name.lower() == close[0])
        return f"did you mean `{original}`?"
    shown = ", ".join(names[:12]) + (", ..." if len(names) > 12 else "")
    return f"known: {shown}" if names else "none is known"
