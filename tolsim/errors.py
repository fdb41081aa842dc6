"""What tolsim raises to its users, and how a mistake in a file is told.

An exception always means that what was asked for is wrong or cannot be done.  A unit
that will not start or settle is never an exception: it is a row of the results.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from difflib import get_close_matches


class TolsimError(Exception):
    """Base of every exception tolsim raises on purpose."""


class RequestError(TolsimError):
    """What was asked cannot be done: a file that exists already, a unit that was not run."""


class RunError(TolsimError):
    """The study is sound, yet the run could not be finished."""


class Mistake(ValueError):
    """One wrong value or combination, before it is known in which file it stands.

    Validators raise it; `tolsim.study` adds the place and makes a `Problem` of it.

    Parameters
    ----------
    expected : str
        What would be right, as a phrase: "a capacitance of 1 fF to 10 mF".
    cure : str, optional
        What to do about it, as a sentence.
    key : str, optional
        Key the mistake belongs to, if it is not the one being read.
    got : str, optional
        What was found instead, if it is not simply the value being read.
    nearest : str, optional
        Valid name that looks like the one given.
    """

    def __init__(
        self,
        expected: str,
        cure: str = "",
        key: str = "",
        got: str = "",
        nearest: str = "",
    ) -> None:
        super().__init__(expected, cure, key, got, nearest)  # so that it can be pickled
        self.expected = expected
        self.cure = cure
        self.key = key
        self.got = got
        self.nearest = nearest

    def __str__(self) -> str:
        """Say it without a place, for those who build records in Python."""
        got = f" (got {self.got})" if self.got else ""
        key = f"{self.key}: " if self.key else ""
        nearest = f" Did you mean {self.nearest}?" if self.nearest else ""
        cure = f" {self.cure}" if self.cure else ""
        return f"{key}expected {self.expected}{got}.{nearest}{cure}"


@dataclass(frozen=True)
class Problem:
    """One mistake of a file: where it stands, what was found, what would be right.

    Attributes
    ----------
    file : str
        File name as the user gave it.
    table : str
        TOML table, without brackets: "parts.C1"; empty for the top of the file.
    key : str
        Key within the table; empty if the whole table is meant.
    got : str
        The value found, as the user would write it.
    expected : str
        What would be right, as a phrase.
    nearest : str
        Valid name that looks like the one found; empty if there is none.
    cure : str
        What to do, as a sentence; empty if `expected` says it all.
    """

    file: str
    table: str
    key: str
    got: str
    expected: str
    nearest: str = ""
    cure: str = ""

    @classmethod
    def of(cls, mistake: Mistake, file: str, table: str, key: str = "", got: str = "") -> Problem:
        """A mistake with its place; `key` and `got` are used where it names none itself."""
        return cls(
            file,
            table,
            mistake.key or key,
            mistake.got or got,
            mistake.expected,
            mistake.nearest,
            mistake.cure,
        )

    def place(self) -> str:
        """Name the place as `file [table] key`."""
        table = f"[{self.table}]" if self.table else ""
        return " ".join(word for word in (self.file, table, self.key) if word)

    def sentence(self) -> str:
        """Tell the whole mistake in one or two sentences."""
        got = f", got {self.got}" if self.got else ""
        nearest = f" Did you mean {self.nearest}?" if self.nearest else ""
        cure = f" {self.cure}" if self.cure else ""
        return f"{self.place()}: expected {self.expected}{got}.{nearest}{cure}"


class StudyError(TolsimError):
    """A study or spread table is wrong; `problems` holds every mistake found, in file order.

    Parameters
    ----------
    problems : sequence of Problem
        At least one.
    """

    def __init__(self, problems: Sequence[Problem]) -> None:
        super().__init__(tuple(problems))
        self.problems = tuple(problems)

    def __str__(self) -> str:
        """List every mistake, one paragraph each."""
        count = len(self.problems)
        head = "1 mistake:" if count == 1 else f"{count} mistakes:"
        return "\n".join([head, *(f"- {problem.sentence()}" for problem in self.problems)])


def nearest_name(name: str, valid: Sequence[str]) -> str:
    """Valid name most like `name`, or an empty text if none is near."""
    folded = {candidate.casefold(): candidate for candidate in valid}
    near = get_close_matches(name.casefold(), list(folded), n=1, cutoff=0.6)
    return folded[near[0]] if near else ""
