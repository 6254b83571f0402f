"""What may be said about a fit, each question apart: number, limit, margin and a sentence."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields

import numpy as np
from scipy.special import chdtrc, chdtri

from firstarc.fit.fitted import LeastSquares
from firstarc.fit.measurement_model import MeasurementModel
from firstarc.fit.motion import Array
from firstarc.results import Code

#: Chance, in each tail, with which a sound fit fails the chi-square test.
TAIL = 0.005
#: Largest sigma of the weakest direction, as part of distance and speed.
WEAKEST_PART = 0.1
#: The linear prediction is tested at this many sigmas, and may be off by this part there.
LINEAR_SIGMAS, LINEAR_PART = 3.0, 0.3
#: Another minimum counts as excluded when its chi-square is larger by this (1 in 1000 for 6 numbers, 22.5).
RIVAL_CHI2 = float(chdtri(6, 1e-3))


@dataclass(frozen=True)
class Verdict:
    """One question about a fit.

    Parameters
    ----------
    ok : bool
    number, limit : float
        What was measured and the limit it was held against; NaN when it could not be measured.
    margin : float
        Room left, positive when ok: part of the limit.
    sentence : str
    """

    ok: bool
    number: float
    limit: float
    margin: float
    sentence: str

    def __bool__(self) -> bool:
        return self.ok


@dataclass(frozen=True)
class Verdicts:
    """All questions. ``determined`` needs all but ``consistent``: wrong sigmas alone do not make an orbit vague.

    Residuals larger than stated do enlarge the sigmas with which ``conditioned`` and ``linear`` are judged. A
    covariance that may not be used linearly leaves the orbit determined only where the bent region is small
    all the same: three sigmas of the weakest direction, lengthened by the nonlinear part, within the limit.
    """

    converged: Verdict
    redundant: Verdict
    conditioned: Verdict
    consistent: Verdict
    linear: Verdict
    single: Verdict

    @property
    def determined(self) -> bool:
        return all(one.ok for name, one in self.items() if name not in ("consistent", "linear")) and self._confined

    @property
    def _confined(self) -> bool:
        reach = LINEAR_SIGMAS * self.conditioned.number * (1.0 + self.linear.number)
        return self.linear.ok or reach <= WEAKEST_PART

    def items(self) -> Iterator[tuple[str, Verdict]]:
        """Names and verdicts in the order of the class."""
        for field in fields(self):
            yield field.name, getattr(self, field.name)

    @property
    def sentence(self) -> str:
        """Why the orbit is determined or not."""
        if self.determined:
            doubts = [one.sentence for one in (self.consistent, self.linear) if not one.ok]
            fixed = "The observations fix one orbit" + (" and its covariance." if self.linear else ".")
            return fixed + (f" But: {' '.join(doubts)}" if doubts else "")
        return "The observations do not fix a single orbit: " + " ".join(
            one.sentence for name, one in self.items() if not one.ok and name != "consistent"
        )


def verdicts(fit: LeastSquares, model: MeasurementModel) -> Verdicts:
    """Judge a fit.

    Parameters
    ----------
    fit : LeastSquares
    model : MeasurementModel
        The one that was fitted; the linearity test asks it for orbits three sigmas away.

    Returns
    -------
    Verdicts
    """
    return Verdicts(
        _converged(fit), _redundant(fit), _conditioned(fit), _consistent(fit), _linear(fit, model), _single(fit)
    )


def _converged(fit: LeastSquares) -> Verdict:
    rows = [row for part in fit.history for row in part]
    number = rows[-1].offset if rows else float("nan")
    limit = 1e-3
    return Verdict(fit.status.ok, number, limit, 1.0 - number / limit, fit.status.sentence)


def _redundant(fit: LeastSquares) -> Verdict:
    if fit.dof >= 1:
        sentence = f"{fit.dof} observed numbers more than unknowns."
    else:
        sentence = "No redundancy: as many unknowns as observed numbers, so nothing tests the orbit."
    return Verdict(fit.dof >= 1, float(fit.dof), 1.0, float(fit.dof) - 1.0, sentence)


def enlargement(fit: LeastSquares) -> float:
    """Factor by which the sigmas must grow to explain the residuals; 1 while the chi-square test allows it.

    Where the residuals exceed the stated sigmas the covariance is too small by this factor at least, and whether
    the orbit is determined is judged with it.
    """
    if fit.dof < 1 or not fit.chi2 > float(chdtri(fit.dof, TAIL)):
        return 1.0
    return float(np.sqrt(fit.chi2 / fit.dof))


def weakest_part(fit: LeastSquares) -> float:
    """Sigma of the weakest direction of the state as part of distance and speed; inf when one is free."""
    if fit.covariance is None:
        return float("inf")
    size = np.repeat([np.linalg.norm(fit.state[:3]), np.linalg.norm(fit.state[3:])], 3)
    scaled = fit.covariance[:6, :6] / np.outer(size, size)
    return float(np.sqrt(max(np.linalg.eigvalsh(scaled)[-1], 0.0)))


def _conditioned(fit: LeastSquares) -> Verdict:
    factor = enlargement(fit)
    part = weakest_part(fit) * factor
    ok = part <= WEAKEST_PART
    if not np.isfinite(part):
        sentence = "At least one direction of the state is not known at all."
    else:
        sentence = (
            f"The weakest direction of the state is known to {part:.2g} of distance and speed"
            f"{_enlarged(factor)}{'' if ok else f'; at most {WEAKEST_PART:g} counts as an orbit'}."
        )
    return Verdict(ok, part, WEAKEST_PART, 1.0 - part / WEAKEST_PART, sentence)


def _enlarged(factor: float) -> str:
    return "" if factor == 1.0 else f", sigmas enlarged {factor:.2g} times as the residuals demand"


def _consistent(fit: LeastSquares) -> Verdict:
    """Two-sided chi-square test of the residuals against the stated sigmas."""
    nothing = float("nan")
    if fit.dof < 1:
        return Verdict(False, nothing, nothing, nothing, "No redundancy: the sigmas cannot be tested.")
    low, high = float(chdtri(fit.dof, 1.0 - TAIL)), float(chdtri(fit.dof, TAIL))
    ok = low <= fit.chi2 <= high
    limit = high if fit.chi2 >= fit.dof else low
    margin = (high - fit.chi2) / high if fit.chi2 >= fit.dof else (fit.chi2 - low) / low
    band = (
        f"chi-square {fit.chi2:.1f}, {1 - 2 * TAIL:.0%} band {low:.1f} to {high:.1f} for {fit.dof} degrees of freedom"
    )
    factor = np.sqrt(fit.chi2 / fit.dof)
    if ok:
        sentence = f"The residuals agree with the stated sigmas: {band}."
    elif fit.chi2 > high:
        chance = float(chdtrc(fit.dof, fit.chi2))
        sentence = (
            f"The residuals are larger than the stated sigmas allow: {band} (chance {max(chance, 1e-99):.0e}); sigmas "
            f"{factor:.2g} times as large would fit, or times, stations or forces are wrong."
        )
    else:
        sentence = f"The residuals are smaller than stated: {band}; the sigmas look {1 / factor:.2g} times too large."
    return Verdict(ok, fit.chi2, limit, margin, sentence)


def nonlinearity(fit: LeastSquares, model: MeasurementModel, sigmas: float = LINEAR_SIGMAS) -> Array:
    """How far residuals stray from their linear prediction along each principal axis of the covariance.

    Parameters
    ----------
    fit : LeastSquares
    model : MeasurementModel
    sigmas : float
        Length of the displacement either way.

    Returns
    -------
    ndarray, shape (j,)
        Largest of both ways of \\|r(x + d) - r(x) - J d\\| / \\|J d\\|, d being so many sigmas along the axis
        and r in sigmas; inf where an orbit there has no answer. Weakest axis first.

    References
    ----------
    The measure of nonlinearity of Bates and Watts 1980, J. R. Statist. Soc. B 42, 1, by differences, not
    divided into intrinsic and parameter parts as the covariance of the state suffers from both.
    """
    if fit.covariance is None:
        return np.array([np.inf])
    place = np.repeat([np.linalg.norm(fit.state[:3]), np.linalg.norm(fit.state[3:])], 3)
    # A parameter has no size of its own: its sigma counts like the state's worst, lest it drown the state's axes.
    share = float((np.sqrt(np.diag(fit.covariance)[:6]) / place).max())
    size = np.concatenate([place, fit.parameter_sigmas / share])
    values, vectors = np.linalg.eigh(fit.covariance / np.outer(size, size))
    prior, _ = model.prior_rows()
    design = np.concatenate([fit.design[fit.used].reshape(-1, size.size), prior])
    out = np.zeros(size.size)
    # The whitening that the fit used, recovered without solving for it again.
    white_at = _whitener(fit, model)
    base = white_at(fit.x)
    for k in range(size.size):
        axis = vectors[:, -1 - k] * np.sqrt(max(values[-1 - k], 0.0)) * size * sigmas
        linear = design @ axis
        for way in (1.0, -1.0):
            moved = white_at(fit.x + way * axis)
            away = moved - base - way * linear[: base.size]
            reach = float(np.linalg.norm(linear))
            # an axis shorter than the arithmetic resolves displaces nothing
            part = float(np.linalg.norm(away)) / reach if axis.any() else 0.0
            out[k] = max(out[k], part if np.isfinite(part) else np.inf)
    return out


def _whitener(fit: LeastSquares, model: MeasurementModel):
    whitening = model.whitening(model.evaluate(fit.x).per_second)[fit.used]

    def white_at(x: Array) -> Array:
        with np.errstate(all="ignore"):
            residual = model.evaluate(x).residual[fit.used]
            return np.asarray((whitening @ residual[:, :, None])[:, :, 0].reshape(-1))

    return white_at


def _linear(fit: LeastSquares, model: MeasurementModel) -> Verdict:
    factor = enlargement(fit)
    part = float(nonlinearity(fit, model, LINEAR_SIGMAS * factor).max())
    ok = part <= LINEAR_PART
    if not np.isfinite(part):
        sentence = "No linear covariance: three sigmas away there is no orbit to compare with."
    else:
        word = "may be used linearly" if ok else "must not be used linearly; use sampled orbits"
        sentence = (
            f"Along its worst axis, {LINEAR_SIGMAS:g} sigmas away{_enlarged(factor)}, the linear prediction is off "
            f"by {part:.2g} of the displacement (limit {LINEAR_PART:g}): the covariance {word}."
        )
    return Verdict(ok, part, LINEAR_PART, 1.0 - part / LINEAR_PART, sentence)


def _single(fit: LeastSquares) -> Verdict:
    rivals = [one for one in fit.others if one.status.ok or one.status.code is Code.CONSTRAINED]
    if not rivals:
        alone = "No other minimum was found from the given starts."
        return Verdict(True, float("inf"), RIVAL_CHI2, float("inf"), alone)
    # Compared as the first fits were, all observations in: the starts' minima were found that way.
    least = min(one.chi2 for one in rivals)
    gap = least - fit.first_chi2
    ok = gap > RIVAL_CHI2
    word = "so much worse that it is excluded" if ok else "too close to be excluded"
    return Verdict(
        ok,
        gap,
        RIVAL_CHI2,
        gap / RIVAL_CHI2 - 1.0,
        f"Another minimum lies {abs(gap):.1f} {'lower' if gap < 0.0 else 'higher'} in chi-square "
        f"(limit {RIVAL_CHI2:.1f}): {word}.",
    )
