"""Errors of firstarc: misuse and unreadable input. Data that admit no orbit are results, not errors."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass


class FirstArcError(Exception):
    """Base of every error that firstarc raises on purpose."""


class UsageError(FirstArcError, ValueError):
    """An argument has a value that the call cannot use; the text names it, its value and the form expected."""


@dataclass(frozen=True)
class Problem:
    """One thing wrong with an input.

    Parameters
    ----------
    where : str
        Line and field, for example ``"line 7, field obsTime"``.
    found : str
        The text that was read.
    wrong : str
        What is wrong with it.
    remedy : str
        What to do about it.
    """

    where: str
    found: str
    wrong: str
    remedy: str

    def __str__(self) -> str:
        found = f" {self.found!r}" if self.found else ""
        return f"{self.where}:{found} {self.wrong}. {self.remedy}"


class InputError(FirstArcError, ValueError):
    """An input could not be read. ``problems`` lists everything that is wrong with it, not only the first."""

    def __init__(self, source: str, problems: Sequence[Problem]):
        self.source = source
        self.problems = tuple(problems)
        count = len(self.problems)
        head = f"{source}: {count} problem{'s' if count != 1 else ''}"
        super().__init__("\n  ".join([head, *map(str, self.problems)]))

    def __reduce__(self):
        return type(self), (self.source, self.problems)
