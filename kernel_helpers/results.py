"""What every result carries: a status with a sentence, and one way of being shown."""

from __future__ import annotations

import html
from dataclasses import dataclass, fields
from enum import Enum
from typing import Any

import numpy as np


class Code(Enum):
    """What a solve came to. ``ok`` codes carry usable numbers; the others say why there are none."""

    CONVERGED = "converged"
    ESTIMATED = "estimated"
    NOT_CONVERGED = "not converged"
    CONSTRAINED = "weak directions held"
    NO_POSITIVE_ROOT = "no positive root"
    NEGATIVE_RANGE = "negative slant range"
    COPLANAR_LINES = "lines of sight coplanar"
    NOT_COPLANAR = "positions not coplanar"
    COLLINEAR = "positions collinear"
    SINGULAR = "singular"
    BELOW_SURFACE = "below the surface"
    OWN_ORBIT = "the observer's own orbit"
    SAME_ORBIT = "same orbit as another root"
    TOO_FAST = "hyperbolic excess beyond the limit"
    BAD_INPUT = "unusable input"
    NO_CANDIDATE = "no admissible candidate"
    NOT_ATTEMPTED = "not attempted"

    @property
    def ok(self) -> bool:
        return self in (Code.CONVERGED, Code.ESTIMATED)


@dataclass(frozen=True)
class Status:
    """Outcome of a solve: a code and a sentence for people.

    Parameters
    ----------
    code : Code
    sentence : str
        One sentence, with numbers and units where they help.
    """

    code: Code
    sentence: str

    @property
    def ok(self) -> bool:
        return self.code.ok

    def __bool__(self) -> bool:
        return self.ok

    def __str__(self) -> str:
        return self.sentence


class Shown:
    """Text and HTML with the same content, both made from :meth:`report_lines`.

    A report is a list of paragraphs (str) and tables (list of rows of str; the first row is the head).
    """

    def report_lines(self) -> list[Any]:
        raise NotImplementedError(f"{type(self).__name__} does not say how it is shown")

    def report(self) -> str:
        from firstarc.report.text import as_text

        return as_text(self.report_lines())

    def __repr__(self) -> str:
        return self.report()

    def _repr_html_(self) -> str:
        from firstarc.report.html import as_html

        return as_html(self.report_lines())


def same(left: Any, right: Any) -> bool:
    """Equality of two field values; arrays are equal when shape and every number agree (NaN equals NaN).

    Plain dataclasses are compared field by field, so that NaN equals NaN inside them too.
    """
    if isinstance(left, np.ndarray) or isinstance(right, np.ndarray):
        a, b = np.asarray(left), np.asarray(right)
        return a.shape == b.shape and bool(np.array_equal(a, b, equal_nan=a.dtype.kind == b.dtype.kind == "f"))
    if isinstance(left, tuple) and isinstance(right, tuple):
        return len(left) == len(right) and all(same(a, b) for a, b in zip(left, right, strict=True))
    if isinstance(left, float) and isinstance(right, float):
        return left == right or (left != left and right != right)
    made = getattr(type(left), "__dataclass_params__", None)
    if made is not None and made.eq and type(left) is type(right):
        return all(same(getattr(left, f.name), getattr(right, f.name)) for f in fields(left) if f.compare)
    return bool(left == right)


class Result(Shown):
    """Base of the frozen result dataclasses: read-only arrays, equality by value, pickled whole."""

    def __post_init__(self) -> None:
        for field in fields(self):  # type: ignore[arg-type]
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                held = value.copy() if value.flags.writeable else value
                held.flags.writeable = False
                object.__setattr__(self, field.name, held)

    def __eq__(self, other: object) -> bool:
        if type(self) is not type(other):
            return NotImplemented
        return all(
            same(getattr(self, f.name), getattr(other, f.name))
            for f in fields(self)  # type: ignore[arg-type]
            if f.compare
        )

    __hash__ = None  # type: ignore[assignment]

    def __setstate__(self, state: dict[str, Any]) -> None:
        for name, value in state.items():
            if isinstance(value, np.ndarray):
                value.flags.writeable = False
            object.__setattr__(self, name, value)


def escaped(text: object) -> str:
    """Text from a file, safe inside HTML."""
    return html.escape(str(text), quote=True)
