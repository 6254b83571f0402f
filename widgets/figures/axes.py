"""Round scale values and their labels: plain numbers, angles and times in sixties, signed log axis."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

MINUS = "\u2212"
THIN = "\u2009"
_SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_HOURS = ("ʰ", "ᵐ", "ˢ")
_DEGREES = ("°", "′", "″")


def nice_up(value: float, steps: tuple[float, ...] = (1.0, 2.0, 5.0)) -> float:
    """The smallest of ``steps`` times a power of ten that is not below a positive ``value``.

    Examples
    --------
    >>> nice_up(0.013), nice_up(2.0), nice_up(7.0)
    (0.02, 2.0, 10.0)
    """
    power = math.floor(math.log10(value))
    for exponent in (power, power + 1):
        for step in steps:
            # Divided by the positive power, so that 0.02 comes out as the float that is written 0.02.
            scaled = step * 10.0**exponent if exponent >= 0 else step / 10.0**-exponent
            if scaled >= value * (1.0 - 1e-12):
                return scaled
    raise AssertionError("unreachable: ten times the power of ten is above the value")


def nice_down(value: float, steps: tuple[float, ...] = (1.0, 2.0, 5.0)) -> float:
    """The largest of ``steps`` times a power of ten that is not above a positive ``value``."""
    power = math.floor(math.log10(value))
    for exponent in (power, power - 1):
        for step in reversed(steps):
            scaled = step * 10.0**exponent if exponent >= 0 else step / 10.0**-exponent
            if scaled <= value * (1.0 + 1e-12):
                return scaled
    raise AssertionError("unreachable: a tenth of the power of ten is below the value")


def grouped(value: float, decimals: int = 0, sign: bool = False) -> str:
    """A number with a true minus sign and thin spaces between groups of three from five digits on.

    Examples
    --------
    >>> grouped(-24518.4), grouped(1184), grouped(0.25, 2, sign=True)
    ('−24\\u2009518', '1\\u2009184', '+0.25')
    """
    text = f"{abs(value):,.{decimals}f}".replace(",", THIN)
    if not any(digit in "123456789" for digit in text):
        return text
    return (MINUS if value < 0 else "+" if sign else "") + text


def power_of_ten(value: float) -> str:
    """The order of magnitude of a positive number, as ``10⁻⁴``."""
    return "10" + str(math.floor(math.log10(value))).translate(_SUPERSCRIPTS)


def multiples(low: float, high: float, step: float) -> list[float]:
    """Multiples of ``step`` from ``low`` to ``high``, ends included."""
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return [index * step for index in range(first, last + 1)]


def linear_ticks(low: float, high: float, target: int, sign: bool = False) -> list[tuple[float, str]]:
    """About ``target`` round values between two bounds, with the digits that their step needs."""
    step = nice_up((high - low) / max(target, 1))
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    return [(value, grouped(value, decimals, sign)) for value in multiples(low, high, step)]


def _sixties_step(span: float, target: int, whole: tuple[float, ...]) -> float:
    """A step for a quantity counted in wholes, sixtieths and sixtieths of these, in seconds."""
    wanted = span / max(target, 1)
    for step in (
        *(1.0, 2.0, 5.0, 10.0, 15.0, 20.0, 30.0),
        *(60.0 * m for m in (1, 2, 5, 10, 15, 20, 30)),
        *whole,
    ):
        if step >= wanted:
            # Below one second the decimals take over.
            return step if step > 1.0 else min(1.0, nice_up(wanted))
    return whole[-1]


def _sixties_label(value: float, step: float, signs: tuple[str, str, str]) -> str:
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    units = round(value * 10**decimals)
    seconds, fraction = divmod(units, 10**decimals)
    whole, rest = divmod(seconds, 3600)
    minutes, seconds = divmod(rest, 60)
    text = f"{whole}{signs[0]}"
    if step < 3600.0:
        text += f"{minutes:02d}{signs[1]}"
    if step < 60.0:
        text += f"{seconds:02d}" + (f".{fraction:0{decimals}d}" if decimals else "") + signs[2]
    return text


def hour_ticks(low_deg: float, high_deg: float, target: int) -> list[tuple[float, str]]:
    """Round right ascensions between two bounds in degrees, labelled in hours, minutes and seconds.

    Bounds may run past 0° or 360°; labels are taken back into 0–24 h.

    Examples
    --------
    >>> hour_ticks(350.0, 376.0, 2)
    [(360.0, '0ʰ'), (375.0, '1ʰ')]
    """
    low, high = low_deg * 240.0, high_deg * 240.0
    step = _sixties_step(high - low, target, tuple(3600.0 * h for h in (1, 2, 3, 6, 12)))
    ticks = multiples(low, high, step)
    return [(value / 240.0, _sixties_label(value % 86400.0, step, _HOURS)) for value in ticks]


def declination_ticks(low_deg: float, high_deg: float, target: int) -> list[tuple[float, str]]:
    """Round declinations between two bounds in degrees, labelled in degrees, minutes and seconds of arc.

    Examples
    --------
    >>> declination_ticks(-10.7, -10.55, 2)
    [(-10.666666666666666, '−10°40′'), (-10.583333333333334, '−10°35′')]
    """
    low, high = max(low_deg, -90.0) * 3600.0, min(high_deg, 90.0) * 3600.0
    step = _sixties_step(high - low, target, tuple(3600.0 * d for d in (1, 2, 5, 10, 15, 20, 30, 45)))
    out = []
    for value in multiples(low, high, step):
        sign = "" if abs(value) < step / 2 else MINUS if value < 0 else "+"
        out.append((value / 3600.0, sign + _sixties_label(abs(value), step, _DEGREES)))
    return out


def time_of_day_ticks(low_s: float, high_s: float, target: int) -> list[tuple[float, str]]:
    """Round times between two bounds in seconds of a day, labelled ``hh:mm`` or ``hh:mm:ss``.

    Bounds may run past midnight. The labels are in the time scale of the bounds.

    Examples
    --------
    >>> time_of_day_ticks(86000.0, 87000.0, 2)
    [(86400.0, '00:00'), (87000.0, '00:10')]
    """
    step = _sixties_step(high_s - low_s, target, tuple(3600.0 * h for h in (1, 2, 3, 6, 12, 24)))
    out = []
    for value in multiples(low_s, high_s, step):
        hours, rest = divmod(value % 86400.0, 3600.0)
        minutes, seconds = divmod(rest, 60.0)
        text = f"{int(hours):02d}:{int(minutes):02d}"
        if step < 60.0:
            decimals = max(0, -math.floor(math.log10(step) + 1e-9))
            text += f":{seconds:0{3 + decimals if decimals else 2}.{decimals}f}"
        out.append((value, text))
    return out


def signed_log(values: ArrayLike, knee: float) -> NDArray[np.float64]:
    """asinh of values in units of ``knee``: linear below it, logarithmic above, sign kept."""
    return np.asarray(np.arcsinh(np.asarray(values, dtype=float) / knee))
