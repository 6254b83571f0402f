"""Gibbs or Herrick-Gibbs: the rule with the smaller predicted error of the middle velocity.

The predicted error of a rule is  sqrt(truncation^2 + noise^2).  Noise: the sigmas of the observations carried
through the whole way to the velocity (angles through Gauss to the positions, hence correlated; or the
sigmas of measured positions). Truncation: the rule's velocity against the reference two-body orbit, which
is the converged orbit where there is one; for measured positions it is the Gibbs orbit, on which
Herrick-Gibbs is tried.

The textbook rule by separation angle (Gibbs above 5 deg, Herrick-Gibbs below 1 deg, either between; common
practice, after Vallado 2013, section 7.5, recalled) is stated beside. It holds for positions good to about a
metre only, and decides where the noise is not known.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from firstarc.preliminary.gauss import RangePolynomial, gauss_estimate, range_polynomial
from firstarc.preliminary.gibbs import gibbs_velocity
from firstarc.preliminary.herrick_gibbs import herrick_gibbs_velocity
from firstarc.preliminary.lines_of_sight import Array, Lines, angle
from firstarc.twobody.kepler import propagate

GIBBS = "Gibbs"
HERRICK_GIBBS = "Herrick-Gibbs"
#: Separations (deg) of the textbook rule.
TEXTBOOK_LOW_DEG = 1.0
TEXTBOOK_HIGH_DEG = 5.0


@dataclass(frozen=True)
class RuleChoice:
    """Which velocity formula is used, and why.

    Parameters
    ----------
    rule : str
        "Gibbs" or "Herrick-Gibbs".
    reason : str
    textbook : str
        What the separation angle alone says: "Gibbs", "Herrick-Gibbs" or "either".
    gibbs_error_km_s, herrick_gibbs_error_km_s : float
        Predicted errors of the middle velocity; NaN if the noise is not known.
    gibbs_noise_km_s, herrick_gibbs_noise_km_s : float
        Their part from the noise.
    gibbs_truncation_km_s, herrick_gibbs_truncation_km_s : float
        Their part without noise; NaN without a reference orbit.
    """

    rule: str
    reason: str
    textbook: str
    gibbs_error_km_s: float
    herrick_gibbs_error_km_s: float
    gibbs_noise_km_s: float
    herrick_gibbs_noise_km_s: float
    gibbs_truncation_km_s: float
    herrick_gibbs_truncation_km_s: float


def textbook_word(separations_deg: ArrayLike) -> str:
    """The textbook's choice from the separations of neighbouring positions, deg."""
    smaller = float(np.min(np.asarray(separations_deg, dtype=float)[:2]))
    if smaller >= TEXTBOOK_HIGH_DEG:
        return GIBBS
    return HERRICK_GIBBS if smaller < TEXTBOOK_LOW_DEG else "either"


def _error_words(km_s: float) -> str:
    if km_s >= 0.1:
        return f"{km_s:.2g} km/s"
    return f"{km_s * 1e3:.2g} m/s" if km_s >= 1e-4 else f"{km_s * 1e6:.2g} mm/s"


def choose(
    separations_deg: ArrayLike,
    noise: tuple[float, float] | None,
    truncation: tuple[float, float] | None,
    usable: tuple[bool, bool],
) -> RuleChoice:
    """The choice from both rules' noise and truncation (km/s), Gibbs first.

    Parameters
    ----------
    separations_deg : array_like, shape (2 or more,)
    noise : pair of float, or None if the sigmas are not known
    truncation : pair of float, or None without a reference orbit
    usable : pair of bool
        Whether each rule gave a velocity at all.
    """
    textbook = textbook_word(separations_deg)
    nan = float("nan")
    noise_g, noise_h = noise if noise is not None else (nan, nan)
    cut_g, cut_h = truncation if truncation is not None else (nan, nan)
    error_g = float(np.hypot(noise_g, 0.0 if truncation is None else cut_g))
    error_h = float(np.hypot(noise_h, 0.0 if truncation is None else cut_h))
    known = noise is not None and truncation is not None and np.isfinite(error_g + error_h)
    if not usable[0] or not usable[1]:
        rule = GIBBS if usable[0] else HERRICK_GIBBS
        other = HERRICK_GIBBS if usable[0] else GIBBS
        reason = f"{rule}: {other} gives no velocity here."
    elif known:
        rule = GIBBS if error_g <= error_h else HERRICK_GIBBS
        less, more = sorted((error_g, error_h))
        reason = f"{rule}: predicted velocity error {_error_words(less)}, the other rule {_error_words(more)}."
    else:
        rule = HERRICK_GIBBS if textbook == HERRICK_GIBBS else GIBBS
        missing = "the noise is not known" if noise is None else "there is no orbit to predict the error on"
        bound = {GIBBS: "at least 5 deg", HERRICK_GIBBS: "below 1 deg"}.get(textbook, "between 1 and 5 deg")
        reason = f"{rule}: {missing}, and the smaller separation is {bound}."
    return RuleChoice(rule, reason, textbook, error_g, error_h, noise_g, noise_h, cut_g, cut_h)


def _root_of_covariance(covariance: Array) -> Array:
    """Columns c with sum of c c^T = covariance, (k, 2, 2) [.., :, column]; zero sigmas allowed."""
    out = np.zeros_like(covariance)
    first = np.sqrt(np.maximum(covariance[:, 0, 0], 0.0))
    out[:, 0, 0] = first
    out[:, 1, 0] = np.divide(covariance[:, 0, 1], first, out=np.zeros_like(first), where=first > 0.0)
    out[:, 1, 1] = np.sqrt(np.maximum(covariance[:, 1, 1] - out[:, 1, 0] ** 2, 0.0))
    return out


def turned_lines(lines: Lines, covariance: Array) -> Lines:
    """Twelve lanes: one triple with each principal error of its six angles added and taken away in turn.

    Lanes 0 to 5 carry +1 sigma of (first, second error of line 1), line 2, line 3; lanes 6 to 11 the
    opposite.
    """
    axes = lines.frame[:2, ..., 0].transpose(1, 2, 0)
    # Observation, component, principal error.
    shift = axes @ _root_of_covariance(covariance)
    moved = np.zeros((3, 3, 12))
    for line in range(3):
        moved[line, :, 2 * line : 2 * line + 2] = shift[line]
        moved[line, :, 6 + 2 * line : 8 + 2 * line] = -shift[line]
    # The length of a direction is of no account: its change is of second order.
    return Lines(
        lines.unit + moved,
        lines.effective + moved,
        lines.observer_km.repeat(12, -1),
        lines.t_s.repeat(12, -1),
        lines.gm_km3_s2,
        lines.per_c,
    )


def _followed_root(poly: RangePolynomial, start: Array) -> Array:
    """Newton on the octic from a neighbouring root; lanes scaled by the start."""
    a, b, c = poly.a / start**2, poly.b / start**5, poly.c / start**8
    y = np.ones_like(start)
    for _ in range(2):
        square = y * y
        cube = square * y
        value = ((square + a) * cube + b) * cube + c
        y = y - value / ((8.0 * cube * square + 6.0 * a * cube + 3.0 * b) * square)
    return y * start


def angle_noise(lines: Lines, root_km: Array, covariance: Array) -> tuple[Array, Array]:
    """Sigma (km/s, root of the summed variances) of both rules' velocity for every root of one triple.

    Parameters
    ----------
    lines : Lines
        One lane.
    root_km : ndarray, shape (k,)
    covariance : ndarray, shape (3, 2, 2)
        Of the angles, rad^2.

    Returns
    -------
    gibbs_km_s, herrick_gibbs_km_s : ndarray, shape (k,)
    """
    with np.errstate(all="ignore"):
        turned = turned_lines(lines, covariance)
        count = root_km.size
        lanes = np.tile(np.arange(12), count)
        poly = range_polynomial(turned)
        if count > 1:
            turned = turned.take(lanes)
            poly = RangePolynomial(*(part[..., lanes] for part in poly))
        gauss = gauss_estimate(turned, poly, _followed_root(poly, np.repeat(root_km, 12)))
        emission = turned.t_s - gauss.range_km * turned.per_c
        out = []
        for v2 in (
            gibbs_velocity(gauss.r_km, lines.gm_km3_s2),
            herrick_gibbs_velocity(gauss.r_km, emission, lines.gm_km3_s2),
        ):
            half = v2.reshape(3, count, 2, 6)
            half = 0.5 * (half[:, :, 0] - half[:, :, 1])
            out.append(np.sqrt(np.sum(half * half, axis=(0, 2))))
        return out[0], out[1]


def position_choice(r_km: ArrayLike, t_s: ArrayLike | None, gm_km3_s2: float, sigma_km: ArrayLike | None) -> RuleChoice:
    """The choice for three measured positions.

    Parameters
    ----------
    r_km : array_like, shape (3, 3)
        Positions in time order, one a row.
    t_s : array_like, shape (3,), or None
        Their times; without times only Gibbs is possible.
    gm_km3_s2 : float
    sigma_km : float or array_like, shape (3,) or (3, 3), or None
        Sigma of every component, of each position, or of each component of each position.

    Returns
    -------
    RuleChoice
    """
    with np.errstate(all="ignore"):
        r = np.asarray(r_km, dtype=float).reshape(3, 3)
        lanes = r[:, :, None]
        apart = np.degrees([angle(lanes[0], lanes[1])[0], angle(lanes[1], lanes[2])[0]])
        by_gibbs = gibbs_velocity(lanes, gm_km3_s2)[:, 0]
        if t_s is None:
            textbook = textbook_word(apart)
            nan = float("nan")
            return RuleChoice(GIBBS, "Gibbs: no times given.", textbook, nan, nan, nan, nan, nan, nan)
        t = np.asarray(t_s, dtype=float).reshape(3)
        by_herrick = herrick_gibbs_velocity(lanes, t[:, None], gm_km3_s2)[:, 0]
        usable = bool(np.isfinite(by_gibbs).all()), bool(np.isfinite(by_herrick).all())
        truncation = noise = None
        if usable[0]:
            on_orbit, _ = propagate(r[1], by_gibbs, t - t[1], gm_km3_s2)
            tried = herrick_gibbs_velocity(on_orbit[:, :, None], t[:, None], gm_km3_s2)[:, 0]
            truncation = (0.0, float(np.linalg.norm(tried - by_gibbs)))
        if sigma_km is not None:
            sigma = np.asarray(sigma_km, dtype=float)
            sigma = np.broadcast_to(sigma[:, None] if sigma.ndim == 1 else sigma, (3, 3)).reshape(9)
            # A step of one sigma, or a thousandth of a metre where the sigma is zero (and then not counted).
            step = np.where(sigma > 0.0, sigma, 1e-6)
            moved = r.reshape(9)[:, None] + np.concatenate((np.diag(step), -np.diag(step)), axis=1)
            moved = moved.reshape(3, 3, 18)
            variances = []
            for v2 in (
                gibbs_velocity(moved, gm_km3_s2),
                herrick_gibbs_velocity(moved, np.repeat(t[:, None], 18, 1), gm_km3_s2),
            ):
                half = 0.5 * (v2[:, :9] - v2[:, 9:]) * (sigma > 0.0)
                variances.append(float(np.sqrt(np.sum(half * half))))
            noise = variances[0], variances[1]
    return choose(apart, noise, truncation, usable)
