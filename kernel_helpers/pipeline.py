"""The analyst's steps in one place: the only module that imports the whole way.

Observations become plain arrays at the border; the numeric core turns three of them into every root's stages;
here the results get their units, their ranking against the other observations, and their words.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .constants import ARCSEC_RAD, AU_KM, DAY_S, EARTH_RADIUS_KM, SUN_RADIUS_KM
from .determination.preliminary import Preliminary
from .determination.ranking import ranked
from .determination.stages import Candidate, CorrectedStage, Iteration, Stage
from .determination.state import GM_KM3_S2, State, tdb_pair
from .dynamics.light_time import predicted_directions, residuals_rad
from .errors import UsageError
from .observing.observations import Observations
from .observing.sight_lines import SightLines
from .preliminary.candidates import CoreCandidate, CoreGibbs, CoreStage, TripleSolution, solve_triple
from .preliminary.gibbs import gibbs as gibbs_vectors_of
from .preliminary.herrick_gibbs import herrick_gibbs
from .preliminary.outcome import Outcome
from .preliminary.pick import choose_pick
from .preliminary.rule import GIBBS, position_choice
from .report.rounding import significant
from .results import Code, Status
from .uncertainty.consistency import agreement_of_others

Array = NDArray[np.float64]
#: Methods of preliminary determination, and what they are called.
METHODS = {"gauss": "Gauss"}
BODY_RADIUS_KM = {"earth": EARTH_RADIUS_KM, "sun": SUN_RADIUS_KM}
#: Roots are named from the outermost inwards, so that a root keeps its letter while sliders move.
LETTERS = "ABCDEFGH"


def preliminary(obs: Observations, pick: Sequence[int] | None = None, method: str = "gauss") -> Preliminary:
    """Preliminary orbits through three of the observations: every root, three stages each, ranked.

    Parameters
    ----------
    obs : Observations
    pick : sequence of three int, optional
        Positions in ``obs``, any order. Chosen by trial over many triples when left out, and the reason is given.
    method : {"gauss"}
        Gauss' method with Gibbs' or the Herrick-Gibbs correction, converged on the exact two-body orbit.

    Returns
    -------
    Preliminary
        Its ``status`` says when no root is admissible; rejected roots are kept with their reason.

    Raises
    ------
    UsageError
        Fewer than three observations, a pick that is not three different positions, or an unknown method.

    References
    ----------
    Gauss' method in the form of Curtis, *Orbital Mechanics for Engineering Students*, section 5.10; Gibbs' in that
    of Bate, Mueller and White 1971, section 2.5.
    """
    if method not in METHODS:
        raise UsageError(f"method must be one of {', '.join(map(repr, METHODS))}, got {method!r}")
    if not isinstance(obs, Observations):
        raise UsageError(f"obs must be Observations from firstarc.load, got {type(obs).__name__}")
    if pick is None:
        chosen, reason = default_pick(obs)
    else:
        chosen, reason = _checked_pick(pick, obs), "given by the caller."
    lines = obs.sight_lines
    order = sorted(chosen, key=lambda i: (lines.t_s[i], i))
    chosen = (order[0], order[1], order[2])
    rows = list(chosen)
    gm = GM_KM3_S2[obs.center]
    solution = solve_triple(
        lines.los[rows],
        lines.observer_km[rows],
        lines.t_s[rows],
        gm,
        center_velocity_km_s=lines.center_velocity_km_s[rows],
        light_time=lines.light_time,
        sigma_rad=lines.sigma_rad[rows],
        correlation=lines.corr[rows],
        body_radius_km=BODY_RADIUS_KM[obs.center],
    )
    candidates = _candidates(solution, obs, lines, chosen, gm)
    polynomial = solution.polynomial
    return Preliminary(
        pick=chosen,
        pick_rows=(int(obs.rows[chosen[0]]) + 1, int(obs.rows[chosen[1]]) + 1, int(obs.rows[chosen[2]]) + 1),
        pick_reason=reason,
        method=method,
        status=solution.status,
        candidates=candidates,
        roots_km=solution.roots_km,
        coefficients=(polynomial.a_km2, polynomial.b_km5, polynomial.c_km8),
        unit_km=polynomial.unit_km,
        determinant=solution.determinant,
        determinant_sigma=solution.determinant_sigma,
        separations_deg=(float(solution.separations_deg[0]), float(solution.separations_deg[1])),
        center=obs.center,
    )


def default_pick(obs: Observations) -> tuple[tuple[int, int, int], str]:
    """Three observations to start from, and why.

    Raises
    ------
    UsageError
        Fewer than three observations.
    """
    if len(obs) < 3:
        raise UsageError(f"a preliminary orbit needs three observations, got {len(obs)}")
    lines = obs.sight_lines
    return choose_pick(
        lines.los,
        lines.observer_km,
        lines.t_s,
        GM_KM3_S2[obs.center],
        center_velocity_km_s=lines.center_velocity_km_s,
        light_time=lines.light_time,
        sigma_rad=lines.sigma_rad,
        body_radius_km=BODY_RADIUS_KM[obs.center],
    )


def _checked_pick(pick: Sequence[int], obs: Observations) -> tuple[int, int, int]:
    try:
        rows = [int(index) for index in pick]
    except (TypeError, ValueError):
        rows = []
    if len(rows) != 3 or len(set(rows)) != 3 or not all(0 <= row < len(obs) for row in rows):
        raise UsageError(f"pick must be three different positions from 0 to {len(obs) - 1}, got {pick!r}")
    return rows[0], rows[1], rows[2]


def residuals_of(state: State, obs: Observations) -> Array:
    """O-C of observations under a two-body orbit.

    Parameters
    ----------
    state : State
    obs : Observations
        About the same centre.

    Returns
    -------
    ndarray, shape (n, 2)
        RA times cos Dec and Dec, arcsec; light time allowed for unless the directions are geometric.

    Raises
    ------
    UsageError
        The centres differ.
    """
    if state.center != obs.center:
        raise UsageError(f"the state is about the {state.center}, the observations about the {obs.center}")
    lines = obs.sight_lines
    plain = np.concatenate([state.r_km, state.v_km_s])
    return _residuals(plain, _seconds(state.epoch_tdb, lines), lines, state.gm_km3_s2) / ARCSEC_RAD


def _seconds(epoch_tdb: tuple[float, float], lines: SightLines) -> float:
    return ((epoch_tdb[0] - lines.epoch_tdb[0]) + (epoch_tdb[1] - lines.epoch_tdb[1])) * DAY_S


def _residuals(states: Array, t_state_s: Any, lines: SightLines, gm: float) -> Array:
    predicted, _, _ = predicted_directions(
        states, t_state_s, lines.t_s, lines.observer_km, lines.center_velocity_km_s, gm, lines.light_time
    )
    return residuals_rad(lines.los, predicted)


def _candidates(
    solution: TripleSolution, obs: Observations, lines: SightLines, pick: tuple[int, int, int], gm: float
) -> tuple[Candidate, ...]:
    """The core's candidates with units, residuals of all observations, letters and ranking."""
    cores = solution.candidates
    if not cores:
        return ()
    stages = [stage for core in cores for stage in (core.gauss, core.gibbs, core.converged)]
    states = np.stack([stage.state for stage in stages])
    residuals = _residuals(states, solution.candidates[0].gauss.t_state_s, lines, gm).reshape(len(cores), 3, -1, 2)
    others = np.setdiff1d(np.arange(len(lines)), pick)
    built = []
    for k, core in enumerate(cores):
        letter = LETTERS[len(cores) - 1 - k]  # the core lists roots from the innermost
        built.append(_candidate(core, letter, residuals[k], obs, lines, pick, others, gm))
    return ranked(built)


def _candidate(
    core: CoreCandidate,
    letter: str,
    residuals: Array,
    obs: Observations,
    lines: SightLines,
    pick: tuple[int, int, int],
    others: NDArray[np.int64],
    gm: float,
) -> Candidate:
    epoch = (lines.epoch_tdb[0], lines.epoch_tdb[1] + core.gauss.t_state_s / DAY_S)
    arcsec = residuals / ARCSEC_RAD
    gauss, converged = (
        _stage(name, stage, arcsec[i], epoch, obs.center)
        for name, stage, i in (("Gauss estimate", core.gauss, 0), ("Converged", core.converged, 2))
    )
    final = core.converged
    has_orbit = converged.state is not None
    covariance = np.full((6, 6), np.nan) if final.covariance is None else final.covariance
    chi2, dof, chance = agreement_of_others(
        final.state,
        covariance,
        final.t_state_s,
        residuals[2][others],
        lines.t_s[others],
        lines.observer_km[others],
        lines.center_velocity_km_s[others],
        lines.sigma_rad[others],
        gm,
        lines.light_time,
    )
    with np.errstate(invalid="ignore"):
        chi = np.hypot(*(residuals[2] / lines.sigma_rad).T)
    return Candidate(
        letter=letter,
        root_km=core.root_km,
        admissible=core.admissible,
        reason=_reason(core, obs, pick),
        gauss=gauss,
        gibbs=_corrected(core.gibbs, arcsec[1], epoch, obs.center),
        converged=converged,
        history=tuple(
            Iteration(np.array(one.range_km), one.change, max(one.miss_rad) / ARCSEC_RAD) for one in final.history
        ),
        ranges_km=final.range_km if has_orbit else core.gauss.range_km,
        covariance=covariance,
        sigma_range_km=final.range2_sigma_km,
        chi=chi,
        rms_others_arcsec=_rms(arcsec[2][others]),
        chi2_others=chi2,
        dof_others=dof,
        chance_others=chance,
        picked=pick,
        rows=np.asarray(obs.rows),
        sigma_arcsec=lines.sigma_rad / ARCSEC_RAD,
    )


def _reason(core: CoreCandidate, obs: Observations, pick: tuple[int, int, int]) -> str:
    """Why a root is rejected, or what is doubtful about it, in the units and row numbers of the analyst."""
    if core.outcome is Outcome.NEGATIVE_RANGE:
        late = bool(core.gauss.range_km[1] > 0.0)
        ranges = core.converged.range_km if late else core.gauss.range_km
        worst = int(np.argmin(ranges)) if late else 1
        row = int(obs.rows[pick[worst]]) + 1
        return f"slant range negative ({_length(float(ranges[worst]), obs.center)} at row {row})"
    if core.outcome is Outcome.BELOW_SURFACE:
        radius = BODY_RADIUS_KM[obs.center]
        lowest = float(np.linalg.norm(core.converged.positions_km, axis=1).min())
        if lowest < radius:
            return f"{_length(radius - lowest, obs.center)} below the surface when observed"
        word = "perigee" if obs.center == "earth" else "perihelion"
        return f"{word} {_length(radius - core.converged.q_km, obs.center)} below the surface after convergence"
    sentence = (core.remark if core.admissible else core.status.sentence).rstrip(".")
    return sentence[:1].lower() + sentence[1:]


def _length(km: float, center: str) -> str:
    return f"{significant(km, 4)} km" if center == "earth" else f"{significant(km / AU_KM, 3)} au"


def _rms(values: Array) -> float:
    return float(np.sqrt(np.mean(values**2))) if values.size else math.nan


def _state(stage: CoreStage, epoch: tuple[float, float], center: str) -> State | None:
    if not stage.status.ok or not np.isfinite(stage.state).all():
        return None
    return State(stage.state[:3], stage.state[3:], epoch, center)


def _stage(name: str, stage: CoreStage, residuals: Array, epoch: tuple[float, float], center: str) -> Stage:
    return Stage(
        name=name,
        status=stage.status,
        positions_km=stage.positions_km,
        state=_state(stage, epoch, center),
        miss_arcsec=stage.miss_rad / ARCSEC_RAD,
        residuals_arcsec=residuals,
        rms_arcsec=_rms(residuals),
    )


def _corrected(stage: CoreGibbs, residuals: Array, epoch: tuple[float, float], center: str) -> CorrectedStage:
    choice = stage.choice
    return CorrectedStage(
        name=f"{choice.rule} correction",
        status=stage.status,
        positions_km=stage.positions_km,
        state=_state(stage, epoch, center),
        miss_arcsec=stage.miss_rad / ARCSEC_RAD,
        residuals_arcsec=residuals,
        rms_arcsec=_rms(residuals),
        rule=choice.rule,
        rule_reason=choice.reason,
        coplanarity_deg=stage.coplanarity_deg,
        separations_deg=(float(stage.separations_deg[0]), float(stage.separations_deg[1])),
        n_vector=stage.n_km3,
        d_vector=stage.d_km2,
        s_vector=stage.s_km2,
        predicted_error_km_s=(
            ("Gibbs", choice.gibbs_error_km_s),
            ("Herrick-Gibbs", choice.herrick_gibbs_error_km_s),
        ),
    )


def gibbs(
    r_km: Any, center: str = "earth", epochs: Any = None, sigma_km: Any = None, rule: str | None = None
) -> CorrectedStage:
    """The orbit through three measured positions (radar, laser) by Gibbs' or the Herrick-Gibbs formula.

    Parameters
    ----------
    r_km : array_like, shape (3, 3)
        Positions in the order of time, one a row, ICRF axes from the centre, km.
    center : {"earth", "sun"}
    epochs : astropy.time.Time of length 3, optional
        Times of the positions. Without them only Gibbs' formula can be used, and the state has the epoch J2000
        as a placeholder that ``status`` names.
    sigma_km : float or array_like, optional
        Sigma of the positions: one number, one per position, or (3, 3) per component.
    rule : {"Gibbs", "Herrick-Gibbs"}, optional
        Decides the formula by hand; otherwise the one with the smaller predicted error, or the textbook angle
        where no sigma is given.

    Returns
    -------
    CorrectedStage
        ``status`` says when the positions are collinear, not coplanar or admit no orbit.

    Raises
    ------
    UsageError
        Not three positions; times that are not three; Herrick-Gibbs asked for without times.

    References
    ----------
    Bate, Mueller and White 1971, section 2.5; Herrick 1971, *Astrodynamics*, vol. 1.
    """
    if center not in GM_KM3_S2:
        raise UsageError(f'center must be "earth" or "sun", got {center!r}')
    positions = np.array(r_km, dtype=float)
    if positions.shape != (3, 3):
        raise UsageError(f"r_km must have shape (3, 3), three positions in km, one a row; got {positions.shape}")
    if rule not in (None, "Gibbs", "Herrick-Gibbs"):
        raise UsageError(f'rule must be "Gibbs" or "Herrick-Gibbs", got {rule!r}')
    gm = GM_KM3_S2[center]
    pairs = _epoch_pairs(epochs)
    if rule == "Herrick-Gibbs" and pairs is None:
        raise UsageError("the Herrick-Gibbs formula needs the times of the positions: give epochs=")
    times = None if pairs is None else np.array([_between(pairs[1], pair) for pair in pairs])
    if times is not None and not (np.diff(times) > 0.0).all():
        raise UsageError("epochs must increase: give the positions in the order of time, no two at the same time")
    found = gibbs_vectors_of(positions, gm)
    choice = position_choice(positions, times, gm, sigma_km)
    used = rule or choice.rule
    reason = choice.reason if rule in (None, choice.rule) else f"{rule}: asked for. {choice.reason}"
    status = found.status[0]
    velocity = found.v2_km_s
    if used != GIBBS and times is not None and status.code is not Code.BAD_INPUT:
        short = herrick_gibbs(positions, times, gm)
        velocity, status = short.v2_km_s, _first_status(short.status)
    usable = bool(np.isfinite(velocity).all())
    epoch = (2451545.0, 0.0) if pairs is None else pairs[1]
    if usable and pairs is None and status.ok:
        status = Status(status.code, f"{status.sentence} No epochs were given: the state's epoch J2000 means nothing.")
    return CorrectedStage(
        name=f"{used} correction",
        status=status,
        positions_km=positions,
        state=State(positions[1], velocity, epoch, center) if usable else None,
        miss_arcsec=np.full(3, np.nan),
        residuals_arcsec=np.empty((0, 2)),
        rms_arcsec=math.nan,
        rule=used,
        rule_reason=reason,
        coplanarity_deg=float(found.coplanarity_deg),
        separations_deg=(float(found.separations_deg[0]), float(found.separations_deg[1])),
        n_vector=found.n_km3,
        d_vector=found.d_km2,
        s_vector=found.s_km2,
        predicted_error_km_s=(
            ("Gibbs", choice.gibbs_error_km_s),
            ("Herrick-Gibbs", choice.herrick_gibbs_error_km_s),
        ),
    )


def _first_status(status: Any) -> Status:
    return status[0] if isinstance(status, tuple) else status


def _epoch_pairs(epochs: Any) -> list[tuple[float, float]] | None:
    if epochs is None:
        return None
    try:
        ones = list(epochs)
    except TypeError:
        ones = []
    if len(ones) != 3:
        raise UsageError(f"epochs must be three times (astropy Time), got {epochs!r}")
    return [tdb_pair(one, "epochs") for one in ones]


def _between(first: tuple[float, float], second: tuple[float, float]) -> float:
    return ((second[0] - first[0]) + (second[1] - first[1])) * DAY_S
