"""Every zero of two conditions on two slant ranges: a scan, then Newton's iteration.

The scan runs over a grid, logarithmic in the first range; the second covers what the object can reach in the
time between. Where the first condition changes sign along an edge of the grid, its zero there is found by
regula falsi. Joined inside the cells (marching squares) these points are the curve on which the first
condition holds; changes of sign of the second one along it, and its least values, start Newton's iteration.
Conditions are in radians or logarithms: numbers of order one.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from firstarc.preliminary.lines_of_sight import Array, Lines, dot, norm

#: conditions(log_first, log_last, key) -> (2, m): numbers of order one, NaN where there is no orbit.
Conditions = Callable[[Array, Array, Array], Array]
#: Ranges of the scan, in units of the observer's distance from the centre.
NEAREST = 0.005
FARTHEST = 60.0
FIRST_STEPS = 48
LAST_STEPS = 28
#: The same with whole revolutions, where the conditions turn faster.
FIRST_STEPS_TURNING = 56
LAST_STEPS_TURNING = 36
#: Further steps of the last range about the place where the object was at first (logarithms).
CLOSE = np.array([-0.2, -0.1, -0.05, -0.025, -0.01, -0.003, 0.0, 0.003, 0.01, 0.025, 0.05, 0.1, 0.2])
#: Least values of the second condition above this are no start.
NEAR_MISS = 0.5
NEWTON_STEPS = 14
#: Steps along the curve (logarithms) from each zero on which a near second one is sought.
PARTNER_STEPS = np.array([0.01, 0.05, 0.2])
#: What a zero leaves of the conditions, and how near (logarithms) two zeros are one.
_LEFT = 1e-9
_SAME = 1e-5
_DIFFERENCE = 1e-7


class Starts(NamedTuple):
    """Pairs of slant ranges (logarithms, km) and the key of the conditions each belongs to; (m,)."""

    log_first: Array
    log_last: Array
    key: Array


def scale_km(lines: Lines) -> float:
    """The observer's distance from the centre, unit of the scan; 0 where there is none to scale by."""
    size = float(norm(lines.observer_km[1])[0])
    return size if 1e-30 < size < 1e30 else 0.0


def reach_km(lines: Lines, first_km: Array, body_radius_km: float) -> Array:
    """How far apart both outer ranges can be, for each first range (m,)."""
    gm = lines.gm_km3_s2
    observer = lines.observer_km[..., 0]
    size = float(np.sqrt(observer[0] @ observer[0]))
    span = float(lines.t_s[2, 0] - lines.t_s[0, 0])
    place = observer[0][:, None] + first_km * lines.effective[0]
    radius = norm(place)
    lowest = max(body_radius_km, 0.02 * size)
    nearest = np.maximum(radius - np.sqrt(2.0 * gm / radius) * span, lowest)
    # Hyperbolic excess up to the escape speed at the observer.
    speed = np.sqrt(2.0 * gm / np.minimum(nearest, radius) + 2.0 * gm / size)
    return speed * span + float(np.linalg.norm(observer[2] - observer[0]))


def grid(lines: Lines, body_radius_km: float, revolutions: int = 0) -> tuple[Array, Array]:
    """Logarithms of first ranges (i,) and of last ranges (i, j).

    With whole revolutions the grid is finer, and ends where an ellipse of that many in the time cannot reach.
    """
    size = scale_km(lines)
    low, high = np.log(NEAREST * size), np.log(FARTHEST * size)
    rows, columns = FIRST_STEPS, LAST_STEPS
    if revolutions:
        longest = float(lines.t_s[2, 0] - lines.t_s[0, 0]) / revolutions
        largest = np.cbrt(lines.gm_km3_s2 * (longest / (2.0 * np.pi)) ** 2)
        high = float(np.clip(np.log(2.0 * largest + size), low + 0.1, high))
        rows, columns = FIRST_STEPS_TURNING, LAST_STEPS_TURNING
    first = np.linspace(low, high, rows)
    reach = reach_km(lines, np.exp(first), body_radius_km)
    start = np.log(np.maximum(np.exp(first) - reach, np.exp(low)))
    stop = np.log(np.exp(first) + reach)
    stop = np.minimum(stop, np.maximum(high, first + 1.0))
    part = np.linspace(0.0, 1.0, columns)
    last = start[:, None] + (stop - start)[:, None] * part
    # Finer where the object returns to where it was: whole revolutions turn sharply there.
    place = lines.observer_km[0] + np.exp(first) * lines.effective[0]
    back = np.maximum(dot(place - lines.observer_km[2], lines.effective[2]), np.exp(low))
    close = np.clip(np.log(back)[:, None] + CLOSE, start[:, None], stop[:, None])
    return first, np.sort(np.concatenate((last, close), axis=1), axis=1)


def starts(conditions: Conditions, first: Array, last: Array, keys: Array, far_side: float) -> Starts:
    """Starting pairs from the scan.

    Parameters
    ----------
    conditions : callable
    first : ndarray, shape (i,)
    last : ndarray, shape (i, j)
    keys : ndarray of int
        The conditions are scanned for each.
    far_side : float
        Where the sizes at both ends add up to more, a change of sign is a jump and no zero.
    """
    rows, columns = last.shape
    place = np.stack((np.broadcast_to(first[:, None], last.shape), last))
    key = np.repeat(keys, rows * columns)
    flat = np.tile(place.reshape(2, -1), keys.size)
    values = conditions(flat[0], flat[1], key).reshape(2, keys.size, rows, columns)
    # Points of the curve on the edges of both directions, numbered through.
    ends = []
    for side in (np.s_[:, :-1], np.s_[:-1, :]):
        other = tuple(slice(1, None) if part.stop == -1 else part for part in side)
        f, g = values[(0, slice(None), *side)], values[(0, slice(None), *other)]
        change = ((f > 0.0) != (g > 0.0)) & (np.abs(f) + np.abs(g) < far_side)
        k, i, j = np.nonzero(change)
        a, b = place[(slice(None), *side)][:, i, j], place[(slice(None), *other)][:, i, j]
        ends.append((change, keys[k], a, b, f[k, i, j], g[k, i, j]))
    k, a, b, f, g = (np.concatenate([one[n] for one in ends], axis=-1) for n in range(1, 6))
    if not k.size:
        return Starts(np.zeros(0), np.zeros(0), np.zeros(0, dtype=int))
    point, second = _on_edges(conditions, k, a, b, f, g)
    numbers, begin = [], 0
    for change, *_ in ends:
        number = np.full(change.shape, -1)
        number[change] = begin + np.arange(np.count_nonzero(change))
        begin += int(np.count_nonzero(change))
        numbers.append(number)
    across, down = numbers
    cell = np.stack((across[:, :-1], across[:, 1:], down[:, :, :-1], down[:, :, 1:]))
    one, two = [], []
    for m in range(4):
        for n in range(m + 1, 4):
            both = (cell[m] >= 0) & (cell[n] >= 0)
            one.append(cell[m][both])
            two.append(cell[n][both])
    return _of_curve(point, k, second, np.concatenate(one), np.concatenate(two), far_side)


def _on_edges(
    conditions: Conditions, key: Array, low: Array, high: Array, f_low: Array, f_high: Array
) -> tuple[Array, Array]:
    """Zeros (2, m) of the first condition on edges (regula falsi, Illinois), and the second condition there."""
    a, b = np.zeros(key.size), np.ones(key.size)
    point, second = low, f_low
    for _ in range(4):
        part = (a * f_high - b * f_low) / (f_high - f_low)
        point = low + part * (high - low)
        value, second = conditions(point[0], point[1], key)
        left = (value > 0.0) == (f_low > 0.0)
        f_high, f_low = np.where(left, 0.5 * f_high, value), np.where(left, value, 0.5 * f_low)
        a, b = np.where(left, part, a), np.where(left, b, part)
    return point, second


def _of_curve(point: Array, key: Array, second: Array, one: Array, two: Array, far_side: float) -> Starts:
    """Starts where the second condition changes sign along a piece of the curve, or is least."""
    good = np.isfinite(second) & np.isfinite(point).all(axis=0)
    both = good[one] & good[two]
    one, two = one[both], two[both]
    f, g = second[one], second[two]
    change = ((f > 0.0) != (g > 0.0)) & (np.abs(f) + np.abs(g) < far_side)
    part = f / (f - g)
    between = point[:, one] + part * (point[:, two] - point[:, one])
    least = good & (np.abs(second) < NEAR_MISS)
    least[np.where(np.abs(f) >= np.abs(g), one, two)] = False
    least[one[change]] = least[two[change]] = False
    found = np.concatenate((between[:, change], point[:, least]), axis=1)
    return Starts(found[0], found[1], np.concatenate((key[one[change]], key[least])))


def newton(conditions: Conditions, start: Starts) -> tuple[Starts, Array]:
    """Newton's iteration on both logarithms, steps limited and shortened; and what is left of the conditions."""
    x, y, key = (np.array(part) for part in start)
    now = conditions(x, y, key)
    merit = np.sum(now * now, axis=0)
    shrink = np.ones(x.size)
    for _ in range(NEWTON_STEPS):
        going = np.flatnonzero((merit > 1e-24) & (shrink > 1e-3) & np.isfinite(merit))
        if not going.size:
            break
        a, b, k, f = x[going], y[going], key[going], now[:, going]
        count = going.size
        twice = conditions(
            np.concatenate((a + _DIFFERENCE, a - _DIFFERENCE, a, a)),
            np.concatenate((b, b, b + _DIFFERENCE, b - _DIFFERENCE)),
            np.tile(k, 4),
        ).reshape(2, 4, count)
        by_a, by_b = (0.5 / _DIFFERENCE * (twice[:, k] - twice[:, k + 1]) for k in (0, 2))
        det = by_a[0] * by_b[1] - by_a[1] * by_b[0]
        step_a = (by_b[0] * f[1] - by_b[1] * f[0]) / det
        step_b = (by_a[1] * f[0] - by_a[0] * f[1]) / det
        scale = shrink[going] * np.fmin(1.0, 0.7 / np.maximum(np.abs(step_a), np.abs(step_b)))
        trial_a, trial_b = a + scale * step_a, b + scale * step_b
        trial = conditions(trial_a, trial_b, k)
        new = np.sum(trial * trial, axis=0)
        better = new < merit[going]
        take = going[better]
        x[take], y[take], now[:, take], merit[take] = trial_a[better], trial_b[better], trial[:, better], new[better]
        shrink[going] = np.where(better, np.minimum(1.0, 3.0 * shrink[going]), 0.25 * shrink[going])
    return Starts(x, y, key), np.sqrt(merit)


#: A scan: logarithms of first ranges (i,), of last ranges (i, j), and the keys scanned on them.
Scan = tuple[Array, Array, Array]


def zeros(conditions: Conditions, scans: list[Scan], far_side: float) -> tuple[Starts, Starts]:
    """All zeros: the starts of every scan, and the pairs to which Newton's iteration leads from each.

    Starts from which it does not converge are kept, with the nearest pair. Zeros often come in near pairs, of
    which the scan may see one: from each zero the other is sought along the curve of the first condition.
    """
    start = _joined([starts(conditions, *scan, far_side) for scan in scans])
    if not start.key.size:
        return start, start
    near, left = newton(conditions, start)
    good = np.flatnonzero(left < _LEFT)
    marks = np.stack((near.key[good], np.round(near.log_first[good] / _SAME), np.round(near.log_last[good] / _SAME)))
    lanes = good[np.unique(marks, axis=1, return_index=True)[1]]
    if not lanes.size:
        return start, near
    x, y, key = near.log_first[lanes], near.log_last[lanes], near.key[lanes]
    by_x = conditions(x + _DIFFERENCE, y, key)[0] - conditions(x - _DIFFERENCE, y, key)[0]
    by_y = conditions(x, y + _DIFFERENCE, key)[0] - conditions(x, y - _DIFFERENCE, key)[0]
    size = np.hypot(by_x, by_y)
    steps = np.concatenate((PARTNER_STEPS, -PARTNER_STEPS))[:, None]
    trial = Starts((x - steps * by_y / size).ravel(), (y + steps * by_x / size).ravel(), np.tile(key, len(steps)))
    more, left = newton(conditions, trial)
    found = left < _LEFT
    return _joined([start, Starts(*(part[found] for part in trial))]), _joined(
        [near, Starts(*(part[found] for part in more))]
    )


def _joined(parts: list[Starts]) -> Starts:
    return Starts(*(np.concatenate([part[n] for part in parts]) for n in range(3)))
