"""Whole revolutions between the first and the last of three observations: which are possible, how they divide."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from firstarc.errors import UsageError
from firstarc.preliminary.lines_of_sight import Array, Lines, norm
from firstarc.preliminary.root_orbits import GRAZING_KM

#: Largest number of whole revolutions tried unless asked for more.
MOST_REVOLUTIONS = 20


class Revolutions(NamedTuple):
    """Whole revolutions between first and middle, middle and last, and the sense of motion.

    ``backward``: against the order of the three positions round the centre.
    """

    before: int
    after: int
    backward: bool

    @property
    def words(self) -> str:
        """In words."""
        if not self.before and not self.after and not self.backward:
            return "less than one revolution"
        sense = "against" if self.backward else "in"
        return f"{self.before} and {self.after} whole revolutions, {sense} the order of the positions"


def wanted_revolutions(revolutions: int | tuple[int, ...] | None) -> tuple[int, ...] | None:
    """The argument ``revolutions`` of a method as sorted numbers; None stays."""
    if revolutions is None:
        return None
    numbers = np.atleast_1d(np.asarray(revolutions))
    whole = np.issubdtype(numbers.dtype, np.integer)
    if numbers.ndim != 1 or not numbers.size or not whole or (numbers < 0).any():
        raise UsageError(f"revolutions is {revolutions!r}; expected whole numbers, 0 or more")
    return tuple(int(n) for n in np.unique(numbers))


def possible_revolutions(
    lines: Lines, first: Array, last: Array, wanted: tuple[int, ...] | None, body_radius_km: float
) -> list[int]:
    """The numbers of whole revolutions that the time allows on a grid of slant ranges (logarithms, km).

    No ellipse through two points is smaller than (r1 + r3 + c) / 4, nor than one that grazes the surface.
    """
    span = float(lines.t_s[2, 0] - lines.t_s[0, 0])
    r1 = norm(lines.observer_km[0] + np.exp(first) * lines.effective[0])[:, None]
    r3 = norm(lines.observer_km[2] + np.exp(last).ravel() * lines.effective[2]).reshape(last.shape)
    far = np.maximum(r1, r3)
    least = np.maximum(0.5 * far, 0.5 * (far + max(body_radius_km - GRAZING_KM, 0.0)))
    period = 2.0 * np.pi * np.sqrt(np.float64(least.min()) ** 3 / lines.gm_km3_s2)
    bound = int(np.nan_to_num(min(span / period, 1e6)))
    if wanted is None:
        return list(range(min(bound, MOST_REVOLUTIONS) + 1))
    return [n for n in wanted if n <= bound]


def revolution_keys(lines: Lines, numbers: list[int]) -> list[Revolutions]:
    """Every division of the given whole revolutions over both arcs, in both senses.

    In the order of the positions the rest beyond whole revolutions is less than one; against it the rests of
    both arcs together make between one revolution and two.
    """
    keys = []
    for n in numbers:
        keys += [Revolutions(k, n - k, False) for k in range(n + 1)]
        keys += [Revolutions(k, n - 1 - k, True) for k in range(n)]
    span = lines.t_s[:, 0]
    # No arc can take more revolutions than its part of the time: two more for rounding of the rests.
    part = (span[1] - span[0]) / (span[2] - span[0])
    return [
        key
        for key in keys
        if key.before <= part * (key.before + key.after) + 1.5
        and key.after <= (1.0 - part) * (key.before + key.after) + 1.5
    ]
