"""From observations to the least-squares orbit: measurements, forces, starts, and the result for people."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..border import planets
from ..border.solar_system import ephemeris
from ..constants import ARCSEC_RAD, C_KM_S, DAY_S
from ..dynamics.decision import decide
from ..dynamics.force_models import Drag, ForceModel, RadiationPressure, full, two_body
from ..dynamics.trajectory import Perturbed
from ..errors import UsageError
from ..fit.fitted import LeastSquares, OtherMinimum
from ..fit.measurement_model import MeasurementModel
from ..fit.measurements import Measurements
from ..fit.motion import Motion, TwoBody
from ..fit.orbit_fit import fit_orbit
from ..fit.parameters import ClockOffset, ForceParameter, Parameter, StationOffset
from ..fit.rejection import RejectionRule, manual_choice
from ..fit.verdicts import WEAKEST_PART, verdicts, weakest_part
from ..fit.weighting import same_night_factors
from ..observing.observations import Observations
from ..results import Code
from .orbit_fit import Estimate, OrbitFit
from .state import GM_KM3_S2, State

Array = NDArray[np.float64]
FORCES = ("two-body", "full")
#: Sightings within so many sigmas (and as many arcsec for the ephemeris) of a planet's place are of that planet.
SEEN_SIGMAS = 5.0
#: What can be estimated of the forces: the force model's own name of it, and its name for people.
FORCE_PARAMETERS = {
    "area-to-mass": ("area_to_mass_m2_kg", "area-to-mass"),
    "ballistic": ("ballistic_m2_kg", "ballistic coefficient C_D A/m"),
}
#: How the reason begins where forces are left out because no single orbit is fixed.
_OPEN = "The arc fixes no single orbit"


@dataclass(frozen=True)
class Forces:
    """What was asked of the forces; the model itself follows from it and the arc.

    Attributes
    ----------
    asked : None or str
        None decides by arc and orbit; ``"two-body"`` and ``"full"`` are taken at their word.
    area_to_mass_m2_kg, ballistic_m2_kg : float or None
        With a number, solar radiation pressure or drag acts.
    estimated : tuple of str
        Those of the two that are unknowns of the fit; they act, too.
    """

    asked: str | None
    area_to_mass_m2_kg: float | None = None
    ballistic_m2_kg: float | None = None
    estimated: tuple[str, ...] = ()

    def model(self, obs: Observations, state: Array, t_state_s: float) -> ForceModel:
        """The force model for these observations."""
        if self.ballistic is not None and obs.center != "earth":
            raise UsageError("drag acts on satellites of the Earth only; these observations are about the Sun")
        if self.asked == "two-body":
            if self.of_surface:
                raise UsageError(
                    'forces="two-body" leaves no room for radiation pressure or drag; give forces=None or forces="full"'
                )
            return two_body(obs.center)
        lines = obs.sight_lines
        span = (min(float(lines.t_s.min()), t_state_s), max(float(lines.t_s.max()), t_state_s))
        radiation = None if self.area_to_mass is None else RadiationPressure(self.area_to_mass)
        drag = None if self.ballistic is None else Drag(self.ballistic)
        pole = planets.earth_pole((lines.epoch_tdb[0], lines.epoch_tdb[1] + t_state_s / DAY_S))
        try:
            tracks = planets.tracks(obs.center, lines.epoch_tdb, span)
        except UsageError as error:
            if self.asked is None and not self.of_surface:
                # outside the ephemeris a decision is still possible; its reason says what is missing
                return decide(obs.center, state, t_state_s, span, float(lines.sigma_rad.min()), None, pole=pole)
            raise UsageError(f"these forces need the planetary ephemeris: {error}") from error
        source = ephemeris().name
        itself = body_seen(obs, tracks)
        if self.asked == "full" or self.of_surface:
            model = full(obs.center, tracks, pole, source, radiation, drag, itself=itself)
            reason = self.reason
        else:
            sigma = float(lines.sigma_rad.min())
            model = decide(obs.center, state, t_state_s, span, sigma, tracks, pole=pole, source=source, itself=itself)
            reason = model.reason
        if itself:
            reason += f" These are sightings of {itself.capitalize()} itself: its own attraction is left out."
        return replace(model, reason=reason.strip())

    @property
    def area_to_mass(self) -> float | None:
        """Where radiation pressure begins; None without it."""
        return (
            0.0
            if self.area_to_mass_m2_kg is None and "area_to_mass_m2_kg" in self.estimated
            else self.area_to_mass_m2_kg
        )

    @property
    def ballistic(self) -> float | None:
        """Where drag begins; None without it."""
        return 0.0 if self.ballistic_m2_kg is None and "ballistic_m2_kg" in self.estimated else self.ballistic_m2_kg

    @property
    def of_surface(self) -> bool:
        """Whether a force acts that depends on the object's own surface and mass."""
        return self.area_to_mass is not None or self.ballistic is not None

    @property
    def reason(self) -> str:
        return "" if self.asked is None else "Asked for by the caller."


def body_seen(obs: Observations, tracks: Mapping[str, Any]) -> str:
    """The perturbing body that the sightings show, by its directions; an empty text when it is none.

    A planet, or the Moon, does not perturb itself, and near its own place its attraction has no bounds.
    """
    lines = obs.sight_lines
    moving = lines.center_velocity_km_s / C_KM_S if lines.light_time else np.zeros(3)
    for name, track in tracks.items():
        away = track(lines.t_s) - lines.observer_km
        if lines.light_time:
            distance = np.linalg.norm(away, axis=1)
            away = track(lines.t_s - distance / C_KM_S) - lines.observer_km - moving * distance[:, None]
        sine = np.linalg.norm(np.cross(away, lines.los), axis=1) / np.linalg.norm(away, axis=1)
        ahead = np.sum(away * lines.los, axis=1) > 0.0
        apart = np.where(ahead, sine, 1.0) / (lines.sigma_rad.max(axis=1) + ARCSEC_RAD)
        # A single bad sighting does not hide what is seen; nor does a passing planet stay this near for the arc.
        if float(np.median(apart)) < SEEN_SIGMAS:
            return name
    return ""


def motion_of(model: ForceModel, names: tuple[str, ...]) -> Motion:
    """What the fit integrates."""
    if model.two_body:
        return TwoBody(model.gm_km3_s2)
    return Perturbed(model, names)


def measurements_of(obs: Observations) -> Measurements:
    """Observations as the fit takes them.

    Sigmas that stand in by default are enlarged where one station gave more than four observations in a night;
    stated ones are taken at their word.
    """
    lines, records = obs.sight_lines, obs.records
    more: dict[str, Any] = {}
    if np.isfinite(lines.range_km).any():
        more.update(range_km=lines.range_km, sigma_range_km=lines.sigma_range_km)
    if obs.center == "sun":
        # about the Sun the observer's vector starts at the Sun: light bends on its way past it
        more["sun_to_observer_km"] = lines.observer_km
    found = Measurements.of_sight_lines(
        lines,
        observer_velocity_km_s=obs.observer_velocity_km_s,
        station=records.site_index,
        # the observations hold east, north and up as rows, the fit takes them as columns
        station_axes=np.swapaxes(obs.station_axes, 1, 2),
        **more,
    )
    factors = np.where(records.sigma_stated, 1.0, same_night_factors(lines.t_s, records.site_index))
    return found if (factors == 1.0).all() else found.with_sigma_factors(factors)


def parameters_of(obs: Observations, estimate: Sequence[str]) -> tuple[list[Parameter], list[tuple[str, str, float]]]:
    """What is to be estimated, and how each number is called: (name, unit, factor from the core's unit).

    Raises
    ------
    UsageError
        A name that is none.
    """
    codes = [site.code for site in obs.records.sites]
    seeing = [code for index, code in enumerate(codes) if (obs.records.site_index == index).any()]
    form = '"clock:CODE", "station:CODE", "area-to-mass" or "ballistic"'
    parameters: list[Parameter] = []
    names: list[tuple[str, str, float]] = []
    for asked in estimate:
        kind, _, code = str(asked).partition(":")
        if kind in ("clock", "station"):
            if code not in seeing:
                raise UsageError(f"estimate names station {code!r}; stations: {', '.join(seeing)}. Form: {form}")
            index = codes.index(code)
            if kind == "clock":
                parameters.append(ClockOffset(index))
                names.append((f"clock of {code}", "s", 1.0))
            else:
                parameters.append(StationOffset(index))
                names += [(f"{axis} of {code}", "m", 1000.0) for axis in ("east", "north", "up")]
        elif asked in FORCE_PARAMETERS:
            own, words = FORCE_PARAMETERS[asked]
            parameters.append(ForceParameter(own))
            names.append((words, "m²/kg", 1.0))
        else:
            raise UsageError(f"estimate holds {asked!r}; give {form}")
    return parameters, names


def make_fit(
    obs: Observations,
    starts: Sequence[State],
    start_words: str,
    forces: Forces,
    reject: bool,
    estimate: Sequence[str],
    keep: Sequence[int],
    leave_out: Sequence[int],
    rivals: Sequence[State] = (),
) -> OrbitFit:
    """Fit all observations from every start; the epoch is that of the first.

    ``rivals`` are orbits that were not asked for but might fit as well: they only serve the verdict on other minima.
    """
    gm = GM_KM3_S2[obs.center]
    lines = obs.sight_lines
    epoch = starts[0].epoch_tdb
    times = np.array([_seconds(state.epoch_tdb, lines.epoch_tdb) for state in starts])
    plain = np.stack([np.concatenate([state.r_km, state.v_km_s]) for state in starts])
    parameters, names = parameters_of(obs, estimate)
    t_state_s = float(times[0])
    measured = measurements_of(obs)
    manual = manual_choice(len(obs), keep, leave_out)
    rule = RejectionRule() if reject else None
    # two-body motion knows no force that could be estimated
    offsets = [one for one in parameters if not isinstance(one, ForceParameter)]
    cheap = MeasurementModel(measured, TwoBody(gm), t_state_s, offsets)
    found: LeastSquares | None = None
    decided = forces.asked is None and not forces.of_surface
    if decided:
        # what perturbs an object depends on where it is: the two-body fit says that better than a start
        trial = fit_orbit(cheap, plain, times, manual)
        part = weakest_part(trial)
        # about the Sun a near object's state is dominated by the observer's own: three looks tell nothing more
        if part > WEAKEST_PART or (obs.center == "sun" and trial.dof < 1):
            model = replace(two_body(obs.center), reason=_open(part))
        else:
            model = forces.model(obs, trial.state, t_state_s)
    else:
        model = forces.model(obs, plain[0], t_state_s)
    for _ in range(DECISIONS):
        real = cheap if model.two_body else MeasurementModel(
            measured, motion_of(model, forces.estimated), t_state_s, parameters
        )  # fmt: skip
        approach = None if model.two_body or forces.estimated else cheap
        found = fit_orbit(real, plain, times, manual, rule, approach=approach)
        if not decided or model.reason.startswith(_OPEN):
            break
        again = forces.model(obs, found.state, t_state_s)
        if again.sentence == model.sentence:
            model = again
            break
        model = again
    assert found is not None  # the loop runs at least once
    found = _with_rivals(found, cheap, rivals, lines.epoch_tdb)
    if model.two_body or forces.estimated:
        cheap = real
    judge = cheap if cheap is real or _same_partials(found, cheap) else real
    return result_of(obs, found, judge, model, epoch, names, start_words, forces, tuple(estimate))


#: Two minima whose states differ by less, as part of distance and speed, are one.
SAME_STATE = 1e-4
#: Two-body motion stands in for the real one when the fit's linearity is tested, if its partials agree this well.
SAME_PARTIALS = 0.01


def _same_partials(found: LeastSquares, cheap: MeasurementModel) -> bool:
    """True when a cheaper motion bends the residuals as the fitted one does.

    Judged by its partials along the principal axes of the covariance; integrating a dozen displaced orbits would cost
    more than the fit.
    """
    if found.covariance is None or not found.used.any():
        return False
    looked = cheap.evaluate(found.x)
    design = (cheap.whitening(looked.per_second) @ looked.by_x)[found.used].reshape(-1, found.x.size)
    fitted = found.design[found.used].reshape(-1, found.x.size)
    size = np.sqrt(np.diag(found.covariance))
    values, vectors = np.linalg.eigh(found.covariance / np.outer(size, size))
    axes = size[:, None] * vectors * np.sqrt(np.maximum(values, 0.0))
    away, reach = np.linalg.norm((design - fitted) @ axes, axis=0), np.linalg.norm(fitted @ axes, axis=0)
    return bool((away <= SAME_PARTIALS * reach).all())


#: Times the forces are decided: on the two-body fit, then on what they themselves lead to.
DECISIONS = 3


def _with_rivals(
    found: LeastSquares, cheap: MeasurementModel, rivals: Sequence[State], origin: tuple[float, float]
) -> LeastSquares:
    """The fit with the minima that other orbits lead to, compared under two-body motion."""
    if not rivals:
        return found
    choice = np.where(found.used, 0, -1)
    own = fit_orbit(cheap, found.state, found.t_state_s, choice)
    plain = np.stack([np.concatenate([state.r_km, state.v_km_s]) for state in rivals])
    times = np.array([_seconds(state.epoch_tdb, origin) for state in rivals])
    best = fit_orbit(cheap, plain, times, choice)
    minima = [OtherMinimum(best.state, best.parameters, best.chi2, best.status, -1), *best.others]
    size = np.repeat([np.linalg.norm(own.state[:3]), np.linalg.norm(own.state[3:])], 3)
    known = [own.state, *(one.state for one in found.others)]
    others = list(found.others)
    for one in minima:
        apart = all(np.abs((one.state - state) / size).max() > SAME_STATE for state in known)
        if apart and (one.status.ok or one.status.code is Code.CONSTRAINED):
            others.append(replace(one, chi2=found.first_chi2 + one.chi2 - own.chi2))
    return replace(found, others=tuple(sorted(others, key=lambda one: one.chi2)))


def _open(part: float) -> str:
    if part <= WEAKEST_PART:
        why = "as many unknowns as observed numbers"
    elif np.isfinite(part):
        why = f"along the weakest direction the state is known to {part:.2g} of distance and speed only"
    else:
        why = "at least one direction of the state is not known at all"
    return (
        f"{_OPEN} ({why}), and what perturbs it depends on which orbit is meant: nothing but two-body motion is put in."
    )


def fitted_model(model: ForceModel, found: LeastSquares) -> ForceModel:
    """The forces with the values that the fit found for what was estimated of them."""
    for name, value in zip(found.parameter_names, found.parameters, strict=True):
        if name in model.parameters and np.isfinite(value):
            model = model.with_value(name, float(value))
    return model


def result_of(
    obs: Observations,
    found: LeastSquares,
    judge: MeasurementModel,
    model: ForceModel,
    epoch: tuple[float, float],
    names: Sequence[tuple[str, str, float]],
    start_words: str,
    forces: Forces,
    estimate: tuple[str, ...],
) -> OrbitFit:
    """The core's fit with units, names and verdicts; ``judge`` computes the orbits of the linearity test."""
    judged = verdicts(found, judge)
    count = 6 + len(found.parameters)
    covariance = np.full((count, count), np.nan) if found.covariance is None else found.covariance
    sigmas = np.sqrt(np.diag(covariance)[6:])
    angles = np.where(found.present[:, :2], found.residual[:, :2], np.nan) / ARCSEC_RAD
    state = State(found.state[:3], found.state[3:], epoch, obs.center)
    return OrbitFit(
        state=state,
        covariance=covariance[:6, :6],
        status=found.status,
        verdicts=judged,
        determined=judged.determined,
        chi2=found.chi2,
        dof=found.dof,
        rms_arcsec=found.rms_rad / ARCSEC_RAD,
        used=found.used,
        reasons=found.reasons,
        residuals_arcsec=angles,
        sigma_arcsec=found.sigma[:, :2] / ARCSEC_RAD,
        chi=np.sqrt(np.sum(found.white**2, axis=1)),
        rows=np.asarray(obs.rows),
        estimates=tuple(
            Estimate(name, float(value) * factor, float(sigma) * factor, unit)
            for (name, unit, factor), value, sigma in zip(names, found.parameters, sigmas, strict=True)
        ),
        forces=fitted_model(model, found).sentence,
        forces_reason=model.reason or forces.reason,
        start=start_words,
        iterations=sum(len(part) for part in found.history),
        other_minima=tuple(State(one.state[:3], one.state[3:], epoch, obs.center) for one in found.others),
        notes=(found.rejection_note,) if found.rejection_note else (),
        center=obs.center,
        observations=obs,
        solution=found,
        asked_forces=forces,
        asked_estimates=estimate,
    )


def _seconds(epoch: tuple[float, float], origin: tuple[float, float]) -> float:
    return ((epoch[0] - origin[0]) + (epoch[1] - origin[1])) * DAY_S


def prediction_model(fit: OrbitFit, obs: Observations) -> tuple[MeasurementModel, LeastSquares]:
    """A model of other observations that continues a fit, and the fit on their time scale and with their unknowns.

    Where the forces were decided by the arc they are decided anew over both arcs: a prediction far ahead may need
    more than the fit did. Offsets of stations that none of these observations comes from play no part.
    """
    solution = fit.solution
    lines, records = obs.sight_lines, obs.records
    shift = _seconds(fit.observations.sight_lines.epoch_tdb, lines.epoch_tdb)
    t_state_s = solution.t_state_s + shift
    doubtful = fit.asked_forces.asked is None and fit.forces_reason.startswith(_OPEN)
    model = two_body(obs.center) if doubtful else fit.asked_forces.model(obs, solution.state, t_state_s)
    # offsets go by the station's code: its number may differ from one set of observations to the other
    seeing = {records.sites[index].code for index in np.unique(records.site_index)}
    kept, columns, first = [], list(range(6)), 6
    for asked in fit.asked_estimates:
        kind, _, code = asked.partition(":")
        count = 3 if kind == "station" else 1
        if not code or code in seeing:
            kept.append(asked)
            columns += range(first, first + count)
        first += count
    parameters, _ = parameters_of(obs, kept)
    predicted = MeasurementModel(
        measurements_of(obs), motion_of(model, fit.asked_forces.estimated), t_state_s, parameters
    )
    chosen = np.array(columns)
    covariance = None if solution.covariance is None else solution.covariance[np.ix_(chosen, chosen)]
    moved = replace(
        solution,
        t_state_s=t_state_s,
        parameters=solution.parameters[chosen[6:] - 6],
        parameter_names=predicted.parameter_names,
        covariance=covariance,
    )
    return predicted, moved
