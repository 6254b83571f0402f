"""Automatic rejection of outliers, and their recovery.

After Carpino, Milani and Chesley 2003, Icarus 166, 248 (recalled): the chi-square of each observation is
taken with the covariance of its residual, which is that of the observation minus that of the orbit for an
observation inside the fit, and plus it for one outside. Observations above a limit leave, but only those not
far below the worst, as a bad one spoils its neighbours' residuals; whatever falls below a lower limit comes
back. Their fixed limits (8 to leave, 7 to return, for two components) lose one good observation in fifty;
here the limits follow from the chance, over the whole set, of losing a good one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import chdtri

from firstarc.errors import UsageError
from firstarc.fit.motion import Array


@dataclass(frozen=True)
class RejectionRule:
    """Limits of the automatic rejection.

    Parameters
    ----------
    chance : float
        Chance that a set without bad observations loses any.
    chi2_reject, chi2_recover : float or None
        Fixed limits instead, for two components (8 and 7 in the paper).
    worst_part : float
        Only observations above this part of the worst chi-square leave together.
    recover_part : float
        Limit of recovery as part of that of rejection, when not fixed.
    most : float
        Part of the observations that may be rejected; where more would have to go, the sigmas rather than
        the observations are in doubt.
    passes : int
        Largest number of fits.
    """

    chance: float = 0.005
    chi2_reject: float | None = None
    chi2_recover: float | None = None
    worst_part: float = 0.25
    recover_part: float = 0.875
    most: float = 1.0 / 3.0
    passes: int = 20

    def __post_init__(self) -> None:
        if not 0.0 < self.chance < 1.0:
            raise UsageError(f"chance is {self.chance!r}; expected a probability between 0 and 1")
        low, high = self.chi2_recover, self.chi2_reject
        if low is not None and (high is None or low > high):
            raise UsageError(f"chi2_recover is {low!r}; expected at most chi2_reject, which is {high!r}")

    def limits(self, count: int, components: Array) -> tuple[Array, Array]:
        """Chi-square limits to leave and to return for ``count`` observations of so many components each."""
        each = self.chance / max(count, 1)
        out = np.where(components > 0, chdtri(np.maximum(components, 1), each), np.inf)
        if self.chi2_reject is not None:
            two = float(chdtri(2, each))
            out = out * (self.chi2_reject / two)
        back = out * self.recover_part
        if self.chi2_reject is not None and self.chi2_recover is not None:
            back = out * (self.chi2_recover / self.chi2_reject)
        return out, back


def residual_chi2(white: Array, design: Array, covariance: Array, used: Array) -> Array:
    """Chi-square (n,) of each observation with the covariance of its residual.

    Parameters
    ----------
    white : ndarray, shape (n, k)
        Residuals in sigmas.
    design : ndarray, shape (n, k, j)
        Partials of them.
    covariance : ndarray, shape (j, j)
    used : ndarray of bool, shape (n,)

    Returns
    -------
    ndarray, shape (n,)
        Components that no other observation fixes are left out: their residuals are zero whatever the error.
    """
    orbit = design @ covariance @ np.swapaxes(design, 1, 2)
    size = white.shape[1]
    total = np.eye(size) + np.where(used[:, None, None], -orbit, orbit)
    values, vectors = np.linalg.eigh(total)
    along = (np.swapaxes(vectors, 1, 2) @ white[:, :, None])[:, :, 0]
    # A component that only one observation fixes has no residual of its own to be judged by.
    judged = values > 1e-9
    return np.asarray(np.where(judged, along**2 / np.where(judged, values, 1.0), 0.0).sum(axis=1))


def next_selection(
    chi2: Array, used: Array, manual: Array, components: Array, rule: RejectionRule
) -> tuple[Array, bool]:
    """Which observations the next fit uses.

    Parameters
    ----------
    chi2 : ndarray, shape (n,)
    used : ndarray of bool, shape (n,)
    manual : ndarray of int, shape (n,)
        1 always in, -1 always out, 0 automatic.
    components : ndarray of int, shape (n,)
        Observed components of each.
    rule : RejectionRule

    Returns
    -------
    used : ndarray of bool, shape (n,)
    too_many : bool
        More than ``rule.most`` would have to leave; then the worst only leave up to that part.
    """
    leave, back = rule.limits(int((manual >= 0).sum()), components)
    free = manual == 0
    inside = used & free
    excess = np.where(inside, chi2 / leave, 0.0)
    worst = float(excess.max(initial=0.0))
    out = inside & (excess > max(1.0, rule.worst_part * worst))
    returning = ~used & free & (chi2 < back)
    new = (used & ~out) | returning
    new = (new & free) | (manual > 0)
    room = int(rule.most * int((manual >= 0).sum()))
    gone = free & ~new
    too_many = int(gone.sum()) > room
    if too_many:
        order = np.argsort(np.where(gone, -chi2 / leave, np.inf), kind="stable")
        new = new | gone
        new[order[:room]] = False
    return new, too_many


def reasons(chi2: Array, used: Array, manual: Array, components: Array, rule: RejectionRule | None) -> tuple[str, ...]:
    """Why each observation is in or out, in words."""
    count = int((manual >= 0).sum())
    limit, back = rule.limits(count, components) if rule else (np.full(chi2.shape, np.inf),) * 2
    out = []
    for value, is_used, forced, most, least in zip(chi2, used, manual, limit, back, strict=True):
        if forced > 0:
            out.append("kept by hand" + (f" though chi-square {value:.1f} exceeds {most:.1f}" if value > most else ""))
        elif forced < 0:
            out.append("taken out by hand")
        elif is_used and value > most:
            out.append(f"used although chi-square {value:.1f} exceeds {most:.1f}")
        elif is_used:
            out.append("used")
        else:
            out.append(f"rejected: chi-square {value:.1f}, needed below {least:.1f} to return")
    return tuple(out)


def manual_choice(n: int, keep: Sequence[int] = (), leave_out: Sequence[int] = ()) -> Array:
    """Array (n,) of 1 for observations always in, -1 for those always out, 0 for the others.

    Raises
    ------
    UsageError
        An index is out of range or in both lists.
    """
    out = np.zeros(n, int)
    both = set(keep) & set(leave_out)
    if both:
        raise UsageError(f"observations {sorted(both)} are to be both kept and left out; choose one")
    for name, rows, value in (("keep", keep, 1), ("leave_out", leave_out, -1)):
        wrong = [row for row in rows if not 0 <= row < n]
        if wrong:
            raise UsageError(f"{name} holds {wrong}; observations are numbered 0 to {n - 1}")
        out[list(rows)] = value
    return out
