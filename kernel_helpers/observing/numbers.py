"""Numbers and sexagesimal angles from text, strictly: no exponent tricks, no nan, no other alphabets."""

from __future__ import annotations

import math
import re

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3})?", re.ASCII)
_SIXTY = re.compile(
    r"([+-]?)\s*(\d{1,3})\s*[:hHdD°\s]\s*(\d{1,2})\s*[:mM'′\s]\s*(\d{1,2}(?:\.\d*)?)\s*[sS\"″]?",
    re.ASCII,
)


def number(text: str) -> float | None:
    """A finite number, or None when the text is not one."""
    if _NUMBER.fullmatch(text) is None:
        return None
    value = float(text)
    return value if math.isfinite(value) else None


def sexagesimal(text: str) -> float | None:
    """Value of ``[+-]a b c`` in the unit of ``a``; parts apart by colons, blanks or letters; or None."""
    match = _SIXTY.fullmatch(text.strip())
    if match is None:
        return None
    whole, minutes, seconds = float(match[2]), float(match[3]), float(match[4])
    if minutes >= 60.0 or seconds >= 60.0:
        return None
    # One division, so that values printed to the last digit stay as exact as a float can hold them.
    value = (whole * 3600.0 + minutes * 60.0 + seconds) / 3600.0
    return -value if match[1] == "-" else value


def decimals(text: str) -> int:
    """Digits behind the decimal point of a plain number."""
    mantissa = re.split("[eE]", text)[0]
    return len(mantissa.partition(".")[2])
