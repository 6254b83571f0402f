"""Digits follow the uncertainty, and numbers are typeset one way everywhere.

Sigma gets two digits if its first digit is 1, otherwise one; a value is written to the decimal
place of its sigma (the usual laboratory practice; common practice, no single source).
"""

from __future__ import annotations

import math

MINUS = "\u2212"
THIN = "\u202f"
DASH = "\u2013"


def sigma_decimals(sigma: float) -> int:
    """Decimal places that ``sigma`` justifies; negative when it reaches past the units digit."""
    if not math.isfinite(sigma) or sigma <= 0.0:
        raise ValueError(f"sigma must be positive and finite, got {sigma!r}")
    exponent = math.floor(math.log10(sigma))
    digits = 2 if sigma / 10.0**exponent < 1.95 else 1
    # 0.0996 rounds up to 0.10: one digit of the next decade, which then starts with a 1
    if digits == 1 and round(sigma / 10.0**exponent) >= 10:
        return -exponent
    return digits - 1 - exponent


def fixed(value: float, decimals: int, *, sign: bool = False) -> str:
    """A number with a true minus sign and thin spaces between thousands.

    ``decimals`` below zero rounds to tens, hundreds ... ; a value that is not finite is an en dash.
    """
    if not math.isfinite(value):
        return DASH
    rounded = round(value, decimals)
    if rounded == 0.0:
        rounded = 0.0
    body = f"{abs(rounded):,.{max(decimals, 0)}f}".replace(",", THIN)
    if rounded < 0:
        return MINUS + body
    return ("+" + body) if sign and rounded > 0 else body


def split_point(text: str) -> tuple[str, str]:
    """Text before the decimal point, and the point with what follows."""
    whole, point, fraction = text.partition(".")
    return whole, point + fraction


def significant(value: float, digits: int) -> str:
    """``value`` to a number of significant digits, without an exponent."""
    if not math.isfinite(value):
        return DASH
    if value == 0.0:
        return "0"
    return fixed(value, digits - 1 - math.floor(math.log10(abs(value))))


def scientific(value: float, digits: int = 2) -> str:
    """``2.7·10⁻⁶``; plain digits between 0.001 and 100 000."""
    if not math.isfinite(value):
        return DASH
    if value == 0.0 or 1e-3 <= abs(value) < 1e5:
        return significant(value, digits + 1) if value else "0"
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    raised = str(int(exponent)).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
    return f"{mantissa.replace('-', MINUS)}·10{raised}"


def with_sigma(value: float, sigma: float | None, unit: str = "", *, fallback_digits: int = 4) -> str:
    """``24 518 ± 9 km``; without a usable sigma the value alone, to ``fallback_digits`` significant digits."""
    tail = unit if unit in ("", "°", "″") else f" {unit}"
    if sigma is None or not math.isfinite(sigma) or sigma <= 0.0:
        return significant(value, fallback_digits) + tail
    places = sigma_decimals(sigma)
    return f"{fixed(value, places)} ± {fixed(sigma, places)}{tail}"


def agreeing(text: str, value: float, reference: float, decimals: int, *, period: float | None = None) -> int:
    """How many leading characters of ``text`` are settled against ``reference``.

    The place 10^k counts as settled when \\|value - reference\\| < 0.5 * 10^k, by difference, not by comparing
    text; ``period`` (360 for degrees) wraps the difference.
    """
    if not (math.isfinite(value) and math.isfinite(reference)):
        return 0
    difference = value - reference
    if period:
        difference = (difference + period / 2.0) % period - period / 2.0
    difference = abs(difference)
    whole, _ = split_point(text)
    place = sum(character.isdigit() for character in whole) - 1
    settled = 0
    for index, character in enumerate(text):
        if not character.isdigit():
            continue
        if place < -decimals or difference >= 0.5 * 10.0**place:
            break
        settled = index + 1
        place -= 1
    return settled


def sexagesimal(value: float, decimals: int, *, sign: bool, separator: str = " ", whole_digits: int = 2) -> str:
    """Hours or degrees as ``hh mm ss.ss``; rounding carries, so 59.996 never prints as 60.00."""
    if not math.isfinite(value):
        return DASH
    scale = 10**decimals
    ticks = round(abs(value) * 3600.0 * scale)
    seconds, rest = divmod(ticks, scale)
    minutes, seconds = divmod(seconds, 60)
    whole, minutes = divmod(minutes, 60)
    fraction = f".{rest:0{decimals}d}" if decimals else ""
    head = (MINUS if value < 0 else "+") if sign else ""
    return f"{head}{whole:0{whole_digits}d}{separator}{minutes:02d}{separator}{seconds:02d}{fraction}"


def right_ascension_decimals(sigma_arcsec: float, dec_deg: float) -> int:
    """Decimals of the seconds of RA that its sigma (times cos Dec, arcsec) justifies; 0 to 5."""
    cos_dec = max(math.cos(math.radians(dec_deg)), 1e-3)
    return min(max(sigma_decimals(sigma_arcsec / cos_dec / 15.0), 0), 5)


def right_ascension(ra_deg: float, decimals: int, *, separator: str = " ") -> str:
    """RA as hours, minutes, seconds."""
    hours = (ra_deg % 360.0) / 15.0
    if round(hours * 3600.0 * 10**decimals) >= 86400 * 10**decimals:
        hours = 0.0
    return sexagesimal(hours, decimals, sign=False, separator=separator)


def declination_decimals(sigma_arcsec: float) -> int:
    """Decimals of the arcseconds of Dec that its sigma justifies; 0 to 4."""
    return min(max(sigma_decimals(sigma_arcsec), 0), 4)


def declination(dec_deg: float, decimals: int, *, separator: str = " ") -> str:
    """Dec as degrees, minutes, seconds."""
    return sexagesimal(dec_deg, decimals, sign=True, separator=separator)
