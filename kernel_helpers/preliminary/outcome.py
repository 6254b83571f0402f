"""What became of a triple or of one of its roots, as integer codes for arrays and as statuses for people."""

from __future__ import annotations

from enum import IntEnum

from firstarc.results import Code


class Outcome(IntEnum):
    """Status of a root's orbit in arrays; 0 is the only admissible one."""

    CONVERGED = 0
    NOT_CONVERGED = 1
    NEGATIVE_RANGE = 2
    BELOW_SURFACE = 3
    OWN_ORBIT = 4
    SAME_ORBIT = 5
    TOO_FAST = 6
    NO_POSITIVE_ROOT = 7
    COPLANAR_LINES = 8
    EQUAL_TIMES = 9
    BAD_INPUT = 10

    @property
    def words(self) -> str:
        """The outcome in words."""
        return _WORDS[self]

    @property
    def code(self) -> Code:
        """The code that results carry."""
        return _CODES[self]


_WORDS = {
    Outcome.CONVERGED: "converged",
    Outcome.NOT_CONVERGED: "not converged",
    Outcome.NEGATIVE_RANGE: "negative slant range",
    Outcome.BELOW_SURFACE: "below the surface",
    Outcome.OWN_ORBIT: "the observer's own orbit",
    Outcome.SAME_ORBIT: "same orbit as another root",
    Outcome.TOO_FAST: "hyperbolic excess beyond the limit",
    Outcome.NO_POSITIVE_ROOT: "no positive root",
    Outcome.COPLANAR_LINES: "lines of sight coplanar",
    Outcome.EQUAL_TIMES: "two observations at the same time",
    Outcome.BAD_INPUT: "unusable input",
}
_CODES = {
    Outcome.CONVERGED: Code.CONVERGED,
    Outcome.NOT_CONVERGED: Code.NOT_CONVERGED,
    Outcome.NEGATIVE_RANGE: Code.NEGATIVE_RANGE,
    Outcome.BELOW_SURFACE: Code.BELOW_SURFACE,
    Outcome.OWN_ORBIT: Code.OWN_ORBIT,
    Outcome.SAME_ORBIT: Code.SAME_ORBIT,
    Outcome.TOO_FAST: Code.TOO_FAST,
    Outcome.NO_POSITIVE_ROOT: Code.NO_POSITIVE_ROOT,
    Outcome.COPLANAR_LINES: Code.COPLANAR_LINES,
    Outcome.EQUAL_TIMES: Code.BAD_INPUT,
    Outcome.BAD_INPUT: Code.BAD_INPUT,
}
