"""Nonlinear least squares: Gauss-Newton steps inside a region of trust, singular values in plain sight.

Minimises \\|r(x)\\|^2 for residuals r that are already divided by their sigmas. Each step solves
min \\|r + J p\\| subject to \\|p / scale\\| <= region by the singular values of J scale; inside the region it is
the Gauss-Newton step. Region and damping after Moré 1978, "The Levenberg-Marquardt algorithm: implementation
and theory", Springer LNM 630, 105 (recalled).

It stops when what is left to gain is nothing: the relative offset of Bates and Watts 1981 (Technometrics 23,
179), that is the length of the residuals' projection on the tangent space per parameter, in sigmas; Milani and
Gronchi 2010, *Theory of Orbit Determination*, chapter 5, use the same number as norm of the correction (both
recalled).

The constrained step leaves out the weakest singular direction: it leads to a point of the line of variations
where the full step fails (Milani, Sansaturio, Tommei, Arratia and Chesley 2005, Astron. Astrophys. 431, 729).
Without the two weakest it fits what a very short arc fixes at all, direction and angular rate.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.fit.motion import Array
from firstarc.results import Code, Status

_EPS = float(np.finfo(float).eps)
#: Rows reduced at a time; far more than there are unknowns.
_BLOCK = 200

#: Residuals (m,) in sigmas and their partials (m, k) at x (k,).
Problem = Callable[[Array], tuple[Array, Array]]


@dataclass(frozen=True)
class StopRules:
    """When the iteration ends.

    Parameters
    ----------
    offset : float
        Relative offset below which it has converged: the step left, in sigmas per parameter. One more step
        is then taken.
    reduction : float
        Relative reduction of chi-square, promised and got, below which it has converged (Moré's ftol).
    step : float
        Step relative to x, both scaled, below which it has converged (Moré's xtol).
    rounding_offset : float
        Offset that still counts as converged where rounding allows no better (Bates and Watts: 1e-3).
    iterations : int
        Largest number of trial steps.
    """

    offset: float = 1e-7
    reduction: float = 1e-15
    step: float = 1e-14
    rounding_offset: float = 1e-3
    iterations: int = 60


STANDARD = StopRules()


class IterationRow(NamedTuple):
    """One trial: chi-square before it, offset in sigmas, step in scaled length, damping, accepted or not."""

    chi2: float
    offset: float
    step: float
    damping: float
    accepted: bool


@dataclass(frozen=True, eq=False)
class Minimum:
    """Where an iteration ended.

    Parameters
    ----------
    status : Status
        CONVERGED, CONSTRAINED (least with the weak directions held), SINGULAR or NOT_CONVERGED.
    x : ndarray, shape (k,)
    chi2 : float
    residual : ndarray, shape (m,)
    jacobian : ndarray, shape (m, k)
    covariance : ndarray, shape (k, k), or None
        Inverse of J^T J; None where J has not full rank, as some direction is then not known at all.
    singular_values : ndarray, shape (k,)
        Of J scale, largest first; the inverse of the last is the sigma of the weak direction.
    weak_direction : ndarray, shape (k,)
        The least known direction, as a displacement of x of unit scaled length.
    scale : ndarray, shape (k,)
    offset : float
        Bates and Watts' offset at x, sigmas per parameter.
    history : tuple of IterationRow
    """

    status: Status
    x: Array
    chi2: float
    residual: Array
    jacobian: Array
    covariance: Array | None
    singular_values: Array
    weak_direction: Array
    scale: Array
    offset: float
    history: tuple[IterationRow, ...]

    @property
    def ok(self) -> bool:
        return self.status.ok


class _Point(NamedTuple):
    """Residuals at x with J scale = U diag(s) V^T and g = U^T r."""

    x: Array
    residual: Array
    jacobian: Array
    chi2: float
    s: Array
    vt: Array
    g: Array
    scale: Array


def _triangle(rows: Array) -> Array:
    """Upper triangle of the QR factors of a tall matrix, by blocks of rows.

    Demmel, Grigori, Hoemmen and Langou 2012, SIAM J. Sci. Comput. 34, A206. Blocks are too small for the linear
    algebra library to share among threads, which would cost more than it saves and change the last digits.
    """
    while len(rows) > 2 * _BLOCK:
        missing = -len(rows) % _BLOCK
        if missing:
            rows = np.concatenate([rows, np.zeros((missing, rows.shape[1]))])
        blocks: Array = np.asarray(np.linalg.qr(rows.reshape(-1, _BLOCK, rows.shape[1]), mode="r"))
        rows = blocks.reshape(-1, rows.shape[1])
    return np.asarray(np.linalg.qr(rows, mode="r"))


def _factored(x: Array, residual: Array, jacobian: Array, scale: Array) -> _Point:
    # Orthogonal reduction first, residuals as a last column: the singular values of a small matrix are cheap.
    k = x.size
    both = np.empty((residual.size, k + 1))
    np.multiply(jacobian, scale, out=both[:, :k])
    both[:, k] = residual
    upper = _triangle(both)
    u, s, vt = np.linalg.svd(upper[:k, :k])
    return _Point(x, residual, jacobian, float(residual @ residual), s, vt, u.T @ upper[:k, k], scale)


def _rank(s: Array, rows: int) -> int:
    return int(np.count_nonzero(s > s[0] * max(rows, 10) * _EPS * 10.0)) if s.size and s[0] > 0.0 else 0


def _step(point: _Point, region: float, keep: int) -> tuple[Array, float, float]:
    """Scaled step along the ``keep`` strongest directions, its damping and the reduction it promises."""
    s, g, vt = point.s[:keep], point.g[:keep], point.vt[:keep]
    free = g / s
    damping = 0.0
    length = float(np.sqrt(free @ free))
    if length > region:
        # Newton on 1/length (Hebden): a few passes, monotone from zero damping.
        for _ in range(20):
            parts = s * g / (s * s + damping)
            length = float(np.sqrt(parts @ parts))
            if length <= region * 1.05:
                break
            damping += float((length / region - 1.0) * length**2 / (parts * parts / (s * s + damping)).sum())
        free = s * g / (s * s + damping)
    promised = float(g @ g - ((g - s * free) ** 2).sum())
    return -(vt.T @ free), damping, promised


def minimise(
    problem: Problem,
    start: ArrayLike,
    scale: ArrayLike | None = None,
    region: float | None = None,
    rules: StopRules = STANDARD,
    held: int = 0,
) -> Minimum:
    """Minimise a sum of squares from one start.

    Parameters
    ----------
    problem : callable
        x (k,) -> residuals (m,) in sigmas and their partials (m, k). NaN or inf marks an x without an answer.
    start : array_like, shape (k,)
    scale : array_like, shape (k,), optional
        Size of each variable. None: from the largest column norms met (Moré), which makes the iteration
        independent of units.
    region : float, optional
        First region of trust in scaled length; None: 100 times the start's own, or 100.
    rules : StopRules
    held : int
        How many of the weakest directions every step leaves out.

    Returns
    -------
    Minimum

    Raises
    ------
    UsageError
        Fewer residuals than variables, or no answer at the start.
    """
    x = np.array(start, float)
    residual, jacobian = problem(x)
    if jacobian.ndim != 2 or jacobian.shape != (residual.size, x.size):
        raise UsageError(f"partials have shape {jacobian.shape}; expected ({residual.size}, {x.size})")
    if residual.size < x.size:
        raise UsageError(f"{residual.size} residuals cannot fix {x.size} unknowns; add observations or priors")
    if not (np.isfinite(residual).all() and np.isfinite(jacobian).all()):
        raise UsageError("the start has no finite residuals: no orbit reaches the observations from it")
    own_scale = scale is None
    norms = np.zeros(x.size) if own_scale else np.asarray(scale, float)
    if own_scale:
        norms = np.linalg.norm(jacobian, axis=0)
        size = 1.0 / np.where(norms > 0.0, norms, 1.0)
    else:
        size = norms
    point = _factored(x, residual, jacobian, size)
    if region is None:
        region = 100.0 * (float(np.linalg.norm(x / size)) or 1.0)
    history: list[IterationRow] = []
    status: Status | None = None
    for _ in range(rules.iterations):
        keep = _rank(point.s, residual.size)
        keep = min(keep, x.size - held)
        if keep <= 0:
            status = Status(Code.SINGULAR, "The residuals do not depend on the unknowns at the start.")
            break
        step, damping, promised = _step(point, region, keep)
        length = float(np.linalg.norm(step))
        offset = float(np.sqrt((point.g[:keep] ** 2).sum() / keep))
        trial_x = point.x + step * point.scale
        if not np.isfinite(trial_x).all():
            status = Status(Code.NOT_CONVERGED, "The step has no finite length; the start is out of reach.")
            break
        residual, jacobian = problem(trial_x)
        finite = bool(np.isfinite(residual).all() and np.isfinite(jacobian).all())
        chi2 = float(residual @ residual) if finite else np.inf
        gained = point.chi2 - chi2
        ratio = gained / promised if promised > 0.0 else 1.0
        accepted = finite and gained > 0.0
        history.append(IterationRow(point.chi2, offset, length, damping, accepted))
        before = point.chi2
        tiny = length <= rules.step * float(np.linalg.norm(point.x / point.scale))
        if accepted:
            if own_scale:
                norms = np.maximum(norms, np.linalg.norm(jacobian, axis=0))
                size = 1.0 / np.where(norms > 0.0, norms, 1.0)
            point = _factored(trial_x, residual, jacobian, size)
        if damping == 0.0 and offset <= rules.offset:
            status = _converged(f"step left below {rules.offset:g} sigma", held, len(history))
        elif damping == 0.0 and max(promised, abs(gained)) <= rules.reduction * before:
            status = _converged("chi-square no longer falls", held, len(history))
        elif tiny:
            # No progress that a float can hold; only near the minimum is that a success.
            if offset <= rules.rounding_offset or accepted:
                status = _converged("step below rounding", held, len(history))
            else:
                status = Status(Code.NOT_CONVERGED, f"No step lowers chi-square; {offset:.2g} sigma were left to go.")
        elif not accepted and damping == 0.0 and offset <= rules.rounding_offset and promised <= 1e-9 * before:
            status = _converged("rounding allows no lower chi-square", held, len(history))
        if status is not None:
            if finite and not accepted and offset <= rules.rounding_offset:
                # Chi-square no longer tells the last two apart; the smaller offset does.
                other = _factored(trial_x, residual, jacobian, size)
                point = min(point, other, key=lambda one: float((one.g[:keep] ** 2).sum()))
            break
        region = _next_region(region, length, ratio, damping, accepted)
    if status is None:
        offset = history[-1].offset if history else np.nan
        status = Status(
            Code.NOT_CONVERGED, f"Not converged after {rules.iterations} steps; {offset:.2g} sigma were left to go."
        )
    return _ended(point, status, history, held)


def _next_region(region: float, length: float, ratio: float, damping: float, accepted: bool) -> float:
    if not accepted or ratio < 0.25:
        return 0.25 * min(length, region)
    if ratio > 0.75 or damping == 0.0:
        return max(region, 2.0 * length)
    return region


def _converged(why: str, held: int, trials: int) -> Status:
    if held:
        weak = "the weakest direction" if held == 1 else f"the {held} weakest directions"
        return Status(
            Code.CONSTRAINED, f"Only with {weak} held is there a least sum; it was found in {trials} steps: {why}."
        )
    return Status(Code.CONVERGED, f"Converged in {trials} steps: {why}.")


def _ended(point: _Point, status: Status, history: list[IterationRow], held: int) -> Minimum:
    k = point.x.size
    rank = _rank(point.s, point.residual.size)
    covariance: Array | None = None
    if rank == k:
        root = (point.vt.T / point.s) * point.scale[:, None]
        covariance = root @ root.T
    elif status.ok:
        status = Status(
            Code.SINGULAR, f"The observations fix only {rank} of {k} unknowns; the last direction found is not known."
        )
    keep = max(1, min(rank, k - held))
    offset = float(np.sqrt((point.g[:keep] ** 2).sum() / keep))
    return Minimum(
        status,
        point.x,
        point.chi2,
        point.residual,
        point.jacobian,
        covariance,
        point.s,
        point.vt[-1] * point.scale,
        point.scale,
        offset,
        tuple(history),
    )
