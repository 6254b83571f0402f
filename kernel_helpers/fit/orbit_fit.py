"""The orbit over all observations: from several starts, with rejection and recovery."""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from firstarc.errors import UsageError
from firstarc.fit.fitted import LeastSquares, OtherMinimum
from firstarc.fit.least_squares import STANDARD, IterationRow, Minimum, StopRules, minimise
from firstarc.fit.measurement_model import Evaluation, MeasurementModel
from firstarc.fit.motion import Array
from firstarc.fit.rejection import RejectionRule, next_selection, reasons, residual_chi2
from firstarc.results import Code

#: First region of trust, in units of distance and speed at the start.
_REGION = 0.2
#: Passes in which weights that depend on the orbit (sigma of time) settle, and when they have.
_WEIGHT_PASSES, _WEIGHT_CHANGE = 4, 1e-4
#: Minima closer than this many sigmas along every direction are one.
_SAME_MINIMUM = 1e-2
#: A converged fit is preferred to one that is not unless its chi-square is larger by this (1 in 1000, 6 numbers).
_HARDLY_WORSE = 22.5


class _Weighted:
    """Residuals in sigmas of the chosen observations, priors below them."""

    def __init__(self, model: MeasurementModel, used: Array, whitening: Array):
        self.model = model
        self.used = used
        self.whitening = whitening[used]
        self.prior, self.right = model.prior_rows()

    def __call__(self, x: Array) -> tuple[Array, Array]:
        found = self.model.evaluate(x)
        width = x.size
        with np.errstate(all="ignore"):
            residual = (self.whitening @ found.residual[self.used][:, :, None])[:, :, 0].reshape(-1)
            jacobian = (self.whitening @ found.by_x[self.used]).reshape(-1, width)
        if len(self.right):
            residual = np.concatenate([residual, self.prior @ x - self.right])
            jacobian = np.concatenate([jacobian, self.prior])
        return residual, jacobian


def _scale(model: MeasurementModel, problem: _Weighted, x: Array) -> Array:
    """Radius and speed for the state; for parameters what changes the residuals by the weakest column's worth."""
    out = np.empty(x.size)
    out[:3], out[3:6] = np.linalg.norm(x[:3]), np.linalg.norm(x[3:6])
    if x.size > 6:
        _, jacobian = problem(x)
        norms = np.linalg.norm(jacobian, axis=0)
        typical = float(np.median(norms[:6] * out[:6]))
        out[6:] = np.where(norms[6:] > 0.0, typical / np.where(norms[6:] > 0.0, norms[6:], 1.0), 1.0)
    return out


def _one_fit(
    model: MeasurementModel, used: Array, x: Array, rules: StopRules, history: list[tuple[IterationRow, ...]]
) -> tuple[Minimum, Array]:
    """Minimum from one start and the whitening in force, weights settled."""
    whitening = model.whitening(model.evaluate(x).per_second)
    depends = bool((model.measurements.sigma_time_s[used] > 0.0).any())
    for _ in range(_WEIGHT_PASSES if depends else 1):
        problem = _Weighted(model, used, whitening)
        scale = _scale(model, problem, x)
        found = minimise(problem, x, scale, _REGION, rules)
        history.append(found.history)
        if not found.ok:
            found = _by_the_weak_direction(problem, x, scale, rules, found, history)
        x = found.x
        if not depends:
            break
        settled = model.whitening(model.evaluate(x).per_second)
        change = np.abs(settled - whitening).max() / np.abs(whitening).max()
        if not change > _WEIGHT_CHANGE:
            break
        whitening = settled
    return found, whitening


def _by_the_weak_direction(
    problem: _Weighted,
    x: Array,
    scale: Array,
    rules: StopRules,
    full: Minimum,
    history: list[tuple[IterationRow, ...]],
) -> Minimum:
    """Where the full fit fails: a point of the line of variations, and the full fit once more from there.

    Should that fail as well, range and range rate are both unknown: two directions are held.
    """
    tried = [full]
    for held in (1, 2):
        part = minimise(problem, x, scale, _REGION, rules, held)
        history.append(part.history)
        if held == 1 and part.status.code is Code.CONSTRAINED:
            again = minimise(problem, part.x, scale, _REGION, rules)
            history.append(again.history)
            if again.ok:
                return again
        if part.status.code is Code.CONSTRAINED:
            return part
        tried.append(part)
    return min(tried, key=lambda one: one.chi2)


def _starts(model: MeasurementModel, starts: Array, t_start_s: Array) -> list[Array]:
    """States of all starts at the model's epoch."""
    out = []
    for state, t in zip(starts, t_start_s, strict=True):
        span = (min(t, model.t_state_s), max(t, model.t_state_s))
        forces = model.forces(model.start(state))
        r, v = model.motion.arc(state, float(t), span, forces).at(np.array([model.t_state_s]))
        out.append(model.start(np.concatenate([r[0], v[0]])))
    return out


def _apart(one: Minimum, other: Minimum) -> bool:
    """Are two minima different? In sigmas of the better, whichever way they differ."""
    difference = (one.x - other.x) / one.scale
    if float(np.abs(difference).max()) < 1e-9:
        return False
    return float(np.linalg.norm(one.jacobian @ (one.x - other.x))) > _SAME_MINIMUM * np.sqrt(one.x.size)


def _checked(model: MeasurementModel, starts: ArrayLike, t_start_s: ArrayLike, manual: Array) -> tuple[Array, Array]:
    states = np.atleast_2d(np.asarray(starts, float))
    if states.ndim != 2 or states.shape[1] != 6 or not len(states):
        raise UsageError(f"starts has shape {np.shape(starts)}; expected (6,) or (m, 6): km and km/s")
    if manual.shape != (len(model.measurements),):
        raise UsageError(f"manual has shape {manual.shape}; expected ({len(model.measurements)},)")
    return states, np.broadcast_to(np.asarray(t_start_s, float), (len(states),))


def fit_orbit(
    model: MeasurementModel,
    starts: ArrayLike,
    t_start_s: ArrayLike,
    manual: Array | None = None,
    rejection: RejectionRule | None = None,
    rules: StopRules = STANDARD,
    approach: MeasurementModel | None = None,
) -> LeastSquares:
    """Fit state and parameters to all observations from every start; the least chi-square is returned.

    Parameters
    ----------
    model : MeasurementModel
    starts : array_like, shape (6,) or (m, 6)
        km, km/s.
    t_start_s : float or array_like, shape (m,)
        Time of each.
    manual : ndarray of int, shape (n,), optional
        1 always in, -1 always out, 0 automatic (:func:`firstarc.fit.rejection.manual_choice`).
    rejection : RejectionRule, optional
        None: no automatic rejection.
    rules : StopRules
    approach : MeasurementModel, optional
        A cheaper model of the same observations and epoch, two-body for instance: every start is fitted with
        it first, and only its distinct minima are fitted with ``model``.

    Returns
    -------
    LeastSquares
        Status CONVERGED, CONSTRAINED (the arc is too short for a full fit: a point on the line of variations, or
        only direction and angular rate are fitted), SINGULAR or NOT_CONVERGED. Other minima stand in ``others``.

    Raises
    ------
    UsageError
        Shapes do not fit, fewer observed components than unknowns, no start reaches the observations.
    """
    n = len(model.measurements)
    manual = np.zeros(n, int) if manual is None else np.asarray(manual, int)
    states, times = _checked(model, starts, t_start_s, manual)
    used = manual >= 0
    unknowns = 6 + len(model.parameter_names)
    rows = int(model.present[used].sum()) + len(model.prior_rows()[1])
    if rows < unknowns:
        raise UsageError(f"{rows} observed numbers cannot fix {unknowns} unknowns; add observations or priors")
    begin = list(enumerate(_starts(model, states, times)))
    if approach is not None:
        begin = _approached(model, approach, begin, states, times, used, rules)
    found = _minima(model, begin, used, rules)
    if not found:
        raise UsageError("no start has finite residuals: none of these orbits reaches the observations")
    others = tuple(
        OtherMinimum(one.minimum.x[:6], one.minimum.x[6:], one.minimum.chi2, one.minimum.status, one.start)
        for one in sorted(found[1:], key=lambda one: one.minimum.chi2)
        if one.minimum.ok or one.minimum.status.code is Code.CONSTRAINED
    )
    best, whitening, start, history = found[0]
    first_chi2, note = best.chi2, ""
    if rejection is not None:
        best, whitening, used, note = _with_rejection(model, best, whitening, used, manual, rejection, rules, history)
    fit = _result(model, best, whitening, used, manual, rejection, start, history)
    return replace(fit, others=others, first_chi2=first_chi2, rejection_note=note)


class _Found(NamedTuple):
    """A minimum, the weights it was found with, the start that led to it and the iterations."""

    minimum: Minimum
    whitening: Array
    start: int
    history: list[tuple[IterationRow, ...]]


def _reaches(model: MeasurementModel, x: Array) -> bool:
    if not np.isfinite(x).all():
        return False
    first = model.evaluate(x)
    return bool(np.isfinite(first.residual).all() and np.isfinite(first.by_x).all())


def _minima(model: MeasurementModel, begin: list[tuple[int, Array]], used: Array, rules: StopRules) -> list[_Found]:
    """Distinct minima, the one to be trusted first: the least, or a converged one that is hardly worse."""
    found = []
    for index, x in begin:
        if _reaches(model, x):
            history: list[tuple[IterationRow, ...]] = []
            found.append(_Found(*_one_fit(model, used, x, rules, history), index, history))
    if not found:
        return []
    least = min(one.minimum.chi2 for one in found)
    limit = least + max(_HARDLY_WORSE, 0.05 * least)
    found.sort(
        key=lambda one: (
            one.minimum.chi2 > limit,
            not one.minimum.ok,
            one.minimum.status.code is not Code.CONSTRAINED,
            one.minimum.chi2,
        )
    )
    distinct: list[_Found] = []
    for one in found:
        if all(_apart(known.minimum, one.minimum) for known in distinct):
            distinct.append(one)
    return distinct


def _approached(
    model: MeasurementModel,
    approach: MeasurementModel,
    begin: list[tuple[int, Array]],
    states: Array,
    times: Array,
    used: Array,
    rules: StopRules,
) -> list[tuple[int, Array]]:
    """Starts for the model from the minima of a cheaper one, each only where it is nearer than its own start."""
    if approach.t_state_s != model.t_state_s or len(approach.measurements) != len(model.measurements):
        raise UsageError("approach must hold the model's epoch and observations; only the motion may differ")

    def chi2(x: Array) -> float:
        if not _reaches(model, x):
            return np.inf
        found = model.evaluate(x)
        white, _ = _whitened(found, model.whitening(found.per_second))
        return float((white[used] ** 2).sum())

    original = dict(begin)
    out = []
    for one in _minima(approach, list(enumerate(_starts(approach, states, times))), used, rules):
        near = model.start(one.minimum.x[:6])
        out.append((one.start, near if chi2(near) <= chi2(original[one.start]) else original[one.start]))
    return out or begin


def _with_rejection(
    model: MeasurementModel,
    best: Minimum,
    whitening: Array,
    used: Array,
    manual: Array,
    rule: RejectionRule,
    rules: StopRules,
    history: list[tuple[IterationRow, ...]],
) -> tuple[Minimum, Array, Array, str]:
    """Alternate fits and selections until the selection stays."""
    components = model.present.sum(axis=1)
    unknowns = 6 + len(model.parameter_names)
    met = {used.tobytes()}
    note = ""
    for _ in range(rule.passes):
        if best.covariance is None:
            return best, whitening, used, note or "No rejection: the fit leaves a direction free."
        white, design = _whitened(model.evaluate(best.x), whitening)
        chi2 = residual_chi2(white, design, best.covariance, used)
        new, too_many = next_selection(chi2, used, manual, components, rule)
        if too_many:
            note = (
                f"More than {rule.most:.0%} of the observations would have to be rejected: the sigmas, the times "
                "or the forces are in doubt rather than single observations."
            )
        if int(components[new].sum()) <= unknowns:
            return best, whitening, used, "No further rejection: it would leave no redundancy."
        if np.array_equal(new, used):
            return best, whitening, used, note
        if new.tobytes() in met:
            # A selection met before would be met for ever.
            return best, whitening, used, note or "Rejection and recovery alternate; the last selection is kept."
        met.add(new.tobytes())
        trial, trial_whitening = _one_fit(model, new, best.x, rules, history)
        if not trial.ok:
            return best, whitening, used, "No further rejection: the fit without them does not converge."
        best, whitening, used = trial, trial_whitening, new
    return best, whitening, used, note or f"Rejection stopped after {rule.passes} passes."


def _whitened(found: Evaluation, whitening: Array) -> tuple[Array, Array]:
    white = (whitening @ found.residual[:, :, None])[:, :, 0]
    return white, whitening @ found.by_x


def _result(
    model: MeasurementModel,
    best: Minimum,
    whitening: Array,
    used: Array,
    manual: Array,
    rule: RejectionRule | None,
    start: int,
    history: list[tuple[IterationRow, ...]],
) -> LeastSquares:
    found = model.evaluate(best.x)
    white, design = _whitened(found, whitening)
    components = model.present.sum(axis=1)
    if best.covariance is None:
        each = np.sum(white**2, axis=1)
    else:
        each = residual_chi2(white, design, best.covariance, used)
    prior = len(model.prior_rows()[1])
    weakest = best.singular_values[-1]
    sigma = np.sqrt(np.einsum("nii->ni", model.covariance(found.per_second)))
    return LeastSquares(
        best.status,
        best.x[:6],
        model.t_state_s,
        best.x[6:],
        model.parameter_names,
        best.covariance,
        found.residual,
        np.where(model.present, sigma, np.nan),
        white,
        design,
        model.present,
        each,
        used,
        reasons(each, used, manual, components, rule),
        best.chi2,
        int(components[used].sum()) + prior - best.x.size,
        best.weak_direction / weakest if weakest > 0.0 else best.weak_direction * np.inf,
        best.singular_values,
        tuple(history),
        start,
    )
