"""The analyst's steps in one place: the only module that imports the whole way.

Observations become plain arrays at the border; the numeric core turns some of them into orbits, every root with
its stages; the results get their units, their ranking against the other observations, and their words.
"""

from __future__ import annotations

import math
import operator
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .constants import ARCSEC_RAD, DAY_S
from .determination.building import BODY_RADIUS_KM, Builder, residuals_under
from .determination.fitting import FORCE_PARAMETERS, FORCES, Forces, make_fit
from .determination.orbit_fit import OrbitFit
from .determination.preliminary import Preliminary
from .determination.ranking import contradicted, ranked
from .determination.stages import Candidate, CorrectedStage
from .determination.state import GM_KM3_S2, State, tdb_pair
from .errors import UsageError
from .observing.observations import Observations
from .observing.sight_lines import SightLines
from .preliminary.candidates import solve_triple
from .preliminary.gibbs import gibbs as gibbs_vectors_of
from .preliminary.herrick_gibbs import herrick_gibbs
from .preliminary.method_orbit import MethodOrbit
from .preliminary.methods import METHODS
from .preliminary.pick import choose_pick
from .preliminary.ranging import sample
from .preliminary.rule import GIBBS, position_choice
from .preliminary.solution import TripleSolution
from .results import Code, Status

Array = NDArray[np.float64]
#: An orbit is taken as it is by the automatic choice when its middle slant range is known to this part of itself ...
SUFFICIENT_RANGE_SIGMA = 0.05
#: ... when its determinant is this many times its sigma, and when the other observations do not contradict it.
SUFFICIENT_DETERMINANT = 10.0
#: Eccentricity of the method "assumed-eccentricity" where the caller names none.
DEFAULT_ECCENTRICITY = 0.1


def preliminary(
    obs: Observations,
    pick: Sequence[int] | None = None,
    method: str = "gauss",
    *,
    eccentricity: float | None = None,
    revolutions: int | None = None,
) -> Preliminary:
    """Preliminary orbits from a few of the observations: every root, stage by stage, ranked.

    Parameters
    ----------
    obs : Observations
    pick : sequence of three int, optional
        Positions in ``obs``, any order. Chosen by trial over many triples when left out, and the reason is given.
    method : str
        ``"gauss"``: Gauss' method with Gibbs' or the Herrick-Gibbs correction. ``"laplace"``, ``"double-r"``,
        ``"two-ranges"`` (may span revolutions): other ways to the same exact orbits through the three lines.
        ``"four-observations"``: for lines of sight in one plane. ``"circular"`` and ``"assumed-eccentricity"``: an
        orbit of that shape for very short arcs. ``"ranging"``: a weighted sample over the admissible region.
        ``"measured-ranges"``: Gibbs', Herrick-Gibbs or Lambert on positions with measured range. ``"auto"`` tries
        them by geometry and reports what was tried and why.
    eccentricity : float, optional
        For ``"assumed-eccentricity"`` only; 0.1 when left out.
    revolutions : int, optional
        For ``"two-ranges"`` and ``"double-r"`` only: whole revolutions between first and last; all that the time
        allows when left out.

    Returns
    -------
    Preliminary
        Its ``status`` says when no candidate is admissible; rejected ones are kept with their reason.

    Raises
    ------
    UsageError
        Too few observations, a pick that is not three different positions, an unknown method, or an option that
        the method does not have.

    References
    ----------
    Each method's module in :mod:`firstarc.preliminary` names its source.
    """
    if not isinstance(obs, Observations):
        raise UsageError(f"obs must be Observations from firstarc.load, got {type(obs).__name__}")
    if not isinstance(method, str) or method not in METHODS:
        raise UsageError(f"method must be one of {', '.join(map(repr, METHODS))}, got {method!r}")
    if eccentricity is not None and method != "assumed-eccentricity":
        raise UsageError(f'eccentricity belongs to method="assumed-eccentricity", not to {method!r}')
    if revolutions is not None and method not in ("two-ranges", "double-r"):
        raise UsageError(f'revolutions belongs to method="two-ranges" or "double-r", not to {method!r}')
    if 3 <= len(obs) < METHODS[method].fewest:
        raise UsageError(f"method {method!r} needs {METHODS[method].fewest} observations, got {len(obs)}")
    if len(obs) < 3:
        raise UsageError(f"a preliminary orbit needs three observations, got {len(obs)}")
    if pick is None:
        chosen, reason = default_pick(obs)
    else:
        chosen, reason = _checked_pick(pick, obs), "given by the caller."
    work = _Work(obs, _in_time_order(chosen, obs), reason)
    if method == "auto":
        _automatic(work)
    elif method == "gauss":
        work.gauss()
    else:
        work.run(method, eccentricity=eccentricity, revolutions=revolutions)
    return work.result(method)


def _in_time_order(rows: tuple[int, int, int], obs: Observations) -> tuple[int, int, int]:
    first, middle, last = sorted(rows, key=lambda i: (obs.sight_lines.t_s[i], i))
    return first, middle, last


@dataclass
class _Work:
    """One preliminary determination while it is being made."""

    obs: Observations
    pick: tuple[int, int, int]
    pick_reason: str
    candidates: list[Candidate] = field(default_factory=list)
    statuses: list[Status] = field(default_factory=list)
    tried: list[tuple[str, str]] = field(default_factory=list)
    sample: Any = None

    def __post_init__(self) -> None:
        lines, rows = self.lines, list(self.pick)
        self.builder = Builder(self.obs, self.pick)
        # Gauss' polynomial and the determinant describe the geometry of the pick whatever method is used.
        self.triple: TripleSolution = solve_triple(
            lines.los[rows],
            lines.observer_km[rows],
            lines.t_s[rows],
            GM_KM3_S2[self.obs.center],
            center_velocity_km_s=lines.center_velocity_km_s[rows],
            light_time=lines.light_time,
            sigma_rad=lines.sigma_rad[rows],
            correlation=lines.corr[rows],
            body_radius_km=BODY_RADIUS_KM[self.obs.center],
        )

    @property
    def lines(self) -> SightLines:
        return self.obs.sight_lines

    @property
    def determinant_in_sigmas(self) -> float:
        return abs(self.triple.determinant) / self.triple.determinant_sigma if self.triple.determinant_sigma else 0.0

    def gauss(self) -> None:
        """Gauss' method."""
        self.candidates += self.builder.of_gauss(self.triple)
        self.statuses.append(self.triple.status)

    def rows_for(self, method: str) -> list[int]:
        """The observations that a method is given."""
        takes = METHODS[method].takes
        if takes == "all":
            return list(range(len(self.obs)))
        if takes == "ranges":
            return [row for row in self.pick if math.isfinite(self.lines.range_km[row])]
        return list(self.pick)

    def run(self, method: str, *, eccentricity: float | None = None, revolutions: int | None = None) -> None:
        """Another method; what it finds joins the candidates."""
        lines, rows, entry = self.lines, self.rows_for(method), METHODS[method]
        if len(rows) < entry.fewest:
            raise UsageError(
                f"method {method!r} needs {entry.fewest} observations with a measured range in the pick, "
                f"got {len(rows)}"
            )
        options: dict[str, Any] = {}
        if method == "assumed-eccentricity":
            options["eccentricity"] = DEFAULT_ECCENTRICITY if eccentricity is None else eccentricity
        if revolutions is not None:
            options["revolutions"] = revolutions
        if method in ("laplace", "double-r", "two-ranges"):
            options.update(middle=1, correlation=lines.corr[rows])
        if method == "measured-ranges":
            options.update(range_km=lines.range_km[rows], range_sigma_km=lines.sigma_range_km[rows])
        given: dict[str, Any] = dict(
            center_velocity_km_s=lines.center_velocity_km_s[rows],
            light_time=lines.light_time,
            sigma_rad=lines.sigma_rad[rows],
            body_radius_km=BODY_RADIUS_KM[self.obs.center],
        )
        arguments = (lines.los[rows], lines.observer_km[rows], lines.t_s[rows], GM_KM3_S2[self.obs.center])
        orbits: tuple[MethodOrbit, ...]
        if method == "ranging":
            self.sample = sample(*arguments, **given)
            orbits = (self.sample.best,)
        else:
            assert entry.solve is not None  # every method but Gauss' and the automatic choice has one
            orbits = entry.solve(*arguments, **given, **options)
        found = self.builder.of_method(method, orbits, rows)
        self.candidates += found
        self.statuses.append(_status_of(entry.label, orbits))

    def result(self, method: str) -> Preliminary:
        """Everything found so far, ranked."""
        obs, solution = self.obs, self.triple
        polynomial = solution.polynomial
        candidates = ranked(self.candidates)
        return Preliminary(
            pick=self.pick,
            pick_rows=(
                int(obs.rows[self.pick[0]]) + 1,
                int(obs.rows[self.pick[1]]) + 1,
                int(obs.rows[self.pick[2]]) + 1,
            ),
            pick_reason=self.pick_reason,
            method=method,
            tried=tuple(self.tried),
            status=_overall(self.statuses, candidates),
            candidates=candidates,
            sample=self.sample,
            roots_km=solution.roots_km,
            coefficients=(polynomial.a_km2, polynomial.b_km5, polynomial.c_km8),
            unit_km=polynomial.unit_km,
            determinant=solution.determinant,
            determinant_sigma=solution.determinant_sigma,
            separations_deg=(float(solution.separations_deg[0]), float(solution.separations_deg[1])),
            center=obs.center,
        )


def _status_of(label: str, orbits: Sequence[MethodOrbit]) -> Status:
    good = sum(one.admissible for one in orbits)
    if good:
        return Status(Code.CONVERGED, f"{good} admissible orbit{'s' if good != 1 else ''} by {label}.")
    reasons = "; ".join(dict.fromkeys(one.status.sentence.rstrip(".") for one in orbits)) or "nothing found"
    code = orbits[0].status.code if len(orbits) == 1 else Code.NO_CANDIDATE
    return Status(code, f"No admissible orbit by {label}: {reasons}.")


def _overall(statuses: Sequence[Status], candidates: Sequence[Candidate]) -> Status:
    if len(statuses) == 1:
        return statuses[0]
    good = sum(c.admissible for c in candidates)
    if good:
        orbits = f"{good} admissible orbit{'s' if good != 1 else ''}"
        return Status(Code.CONVERGED, f"{orbits} among {len(candidates)} candidates.")
    return Status(Code.NO_CANDIDATE, " ".join(status.sentence for status in statuses))


def _automatic(work: _Work) -> None:
    """Try methods by geometry until one suffices; each attempt is noted with its reason and its outcome."""

    def attempt(method: str, why: str) -> None:
        before = len(work.candidates)
        if method == "gauss":
            work.gauss()
        else:
            work.run(method)
        new = work.candidates[before:]
        good = sum(c.admissible for c in new)
        found = f"{good} of {len(new)} admissible" if new else "no orbit"
        work.tried.append((METHODS[method].label, f"{why}: {found}."))

    if len(work.rows_for("measured-ranges")) >= METHODS["measured-ranges"].fewest:
        attempt("measured-ranges", "ranges were measured in the pick")
        if _suffices(work):
            return
    attempt("gauss", "three directions")
    if _suffices(work):
        return
    weak = work.determinant_in_sigmas < SUFFICIENT_DETERMINANT
    if weak and len(work.obs) >= METHODS["four-observations"].fewest:
        attempt("four-observations", f"the lines of sight are coplanar within {SUFFICIENT_DETERMINANT:.0f} sigma")
        if _suffices(work):
            return
    attempt("two-ranges", "no orbit so far suffices; whole revolutions between the sightings are allowed for")
    if _suffices(work):
        return
    attempt("circular", "the arc fixes no orbit by itself; a circle is the least that can be assumed")
    attempt("ranging", "what the arc does fix: a sample over the admissible region")


def _suffices(work: _Work) -> bool:
    """True when a candidate without assumptions is well fixed and the other observations do not contradict it."""
    for one in work.candidates:
        if not one.admissible or one.method in ("circular", "assumed-eccentricity", "ranging"):
            continue
        sigma = one.sigma_range_km / abs(one.ranges_km[len(one.ranges_km) // 2])
        strong = one.method != "gauss" or work.determinant_in_sigmas >= SUFFICIENT_DETERMINANT
        if sigma <= SUFFICIENT_RANGE_SIGMA and strong and not contradicted(one):
            return True
    return False


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
        rows = [operator.index(index) for index in pick if not isinstance(index, bool)]
    except TypeError:
        rows = []
    if len(rows) != 3 or len(set(rows)) != 3 or not all(0 <= row < len(obs) for row in rows):
        raise UsageError(f"pick must be three different positions from 0 to {len(obs) - 1}, got {pick!r}")
    return rows[0], rows[1], rows[2]


def fit(
    obs: Observations,
    start: Any = None,
    forces: str | None = None,
    reject: bool = True,
    *,
    estimate: Sequence[str] = (),
    keep: Sequence[int] = (),
    leave_out: Sequence[int] = (),
    area_to_mass_m2_kg: float | None = None,
    ballistic_m2_kg: float | None = None,
) -> OrbitFit:
    """The weighted least-squares orbit over all observations.

    Parameters
    ----------
    obs : Observations
    start : Candidate, State, Preliminary or None
        Where to begin. A preliminary result gives all its admissible candidates; None makes one by Gauss' method, and
        by the automatic choice of methods where that leaves the range open. The epoch of the fit is that of the
        (first) start.
    forces : None, "two-body" or "full"
        None takes the terms that move the object noticeably over the arc, and says so in ``forces_reason``. "full" is
        the zonals to J4, Sun and Moon about the Earth, or the planets, the Moon and the Sun's relativistic term.
    reject : bool
        Automatic rejection and recovery of outliers (Carpino, Milani and Chesley 2003).
    estimate : sequence of str
        Further unknowns: ``"clock:CODE"`` (s to be added to the recorded times of a station), ``"station:CODE"``
        (east, north, up of its place, m), ``"area-to-mass"`` (m2/kg, with solar radiation pressure), ``"ballistic"``
        (C_D A / m, m2/kg, with drag).
    keep, leave_out : sequence of int
        Positions in ``obs`` that are always in or always out, whatever the automatic rejection finds.
    area_to_mass_m2_kg : float, optional
        Solar radiation pressure with this area-to-mass ratio, or where its estimate begins.
    ballistic_m2_kg : float, optional
        Drag in a static atmosphere with this C_D A / m, or where its estimate begins; about the Earth only.

    Returns
    -------
    OrbitFit
        ``determined`` is False when the data fix no single orbit; ``verdicts`` say why and ``sample`` holds
        weighted orbits.

    Raises
    ------
    UsageError
        An argument cannot be used, the observations are too few, or nothing gives a start: its text says what to try.

    References
    ----------
    Milani and Gronchi 2010, *Theory of Orbit Determination*; each module of :mod:`firstarc.fit` names its source.
    """
    if not isinstance(obs, Observations):
        raise UsageError(f"obs must be Observations from firstarc.load, got {type(obs).__name__}")
    for name, value in (("area_to_mass_m2_kg", area_to_mass_m2_kg), ("ballistic_m2_kg", ballistic_m2_kg)):
        if value is not None and not (isinstance(value, int | float) and 0.0 <= value < math.inf):
            raise UsageError(f"{name} must be a number from 0 on (m2/kg), got {value!r}")
    if not isinstance(reject, bool):
        raise UsageError(f"reject must be True or False, got {reject!r}")
    if isinstance(estimate, str) or not isinstance(estimate, Iterable):
        raise UsageError(f'estimate must be a list such as ["clock:CODE"], got {estimate!r}')
    lists = {"keep": _positions("keep", keep), "leave_out": _positions("leave_out", leave_out)}
    if forces is not None and forces not in FORCES:
        raise UsageError(f"forces must be None, {' or '.join(map(repr, FORCES))}, got {forces!r}")
    if len(obs) < 3:
        raise UsageError(f"a fit needs three observations, got {len(obs)}")
    states, words, rivals = _starts(obs, start)
    estimated = tuple(FORCE_PARAMETERS[asked][0] for asked in estimate if asked in FORCE_PARAMETERS)
    wanted = Forces(forces, area_to_mass_m2_kg, ballistic_m2_kg, estimated)
    return make_fit(obs, states, words, wanted, reject, tuple(estimate), lists["keep"], lists["leave_out"], rivals)


def _positions(name: str, given: Any) -> tuple[int, ...]:
    try:
        return tuple(operator.index(row) for row in given)
    except TypeError:
        raise UsageError(f"{name} must be a list of positions in obs, got {given!r}") from None


def _starts(obs: Observations, start: Any) -> tuple[list[State], str, list[State]]:
    """States to begin from, what they are in words, and other orbits that may fit as well."""
    if isinstance(start, State):
        if start.center != obs.center:
            raise UsageError(f"start is about the {start.center}, the observations about the {obs.center}")
        return [start], "a state given by the caller", _rivals(obs, None)
    if isinstance(start, Candidate):
        if start.state is None:
            raise UsageError(f"candidate {start.letter} has no converged orbit to start from: {start.reason}")
        words = f"candidate {start.letter} ({METHODS[start.method].label})"
        positions = {int(row): position for position, row in enumerate(obs.rows)}
        pick = [positions.get(int(start.rows[position])) for position in start.picked]
        whole = len(pick) == 3 and None not in pick
        return [start.state], words, _rivals(obs, [int(i) for i in pick if i is not None] if whole else None)
    if start is None:
        start = preliminary(obs)
        if start.best is None or start.best.sigma_range_km > abs(start.best.ranges_km[1]):
            start = preliminary(obs, pick=start.pick, method="auto")
    if not isinstance(start, Preliminary):
        raise UsageError(f"start must be a Candidate, State, Preliminary or None, got {type(start).__name__}")
    good = [c for c in start.candidates if c.admissible and c.state is not None]
    if not good:
        raise UsageError(
            f"no admissible preliminary orbit to start from: {start.status} Give start= a State, or other observations."
        )
    letters = ", ".join(c.letter for c in good)
    return [c.state for c in good if c.state is not None], f"every admissible candidate ({letters})", []


def _rivals(obs: Observations, pick: Sequence[int] | None) -> list[State]:
    """Admissible orbits of Gauss' method: a fit from one start must not overlook that another fits as well."""
    return [c.state for c in preliminary(obs, pick=pick).candidates if c.admissible and c.state is not None]


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
    seconds = (state.epoch_tdb[0] - lines.epoch_tdb[0]) + (state.epoch_tdb[1] - lines.epoch_tdb[1])
    return residuals_under(plain, seconds * DAY_S, lines, state.gm_km3_s2) / ARCSEC_RAD


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
