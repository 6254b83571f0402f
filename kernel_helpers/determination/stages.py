"""The three stages of a candidate: Gauss estimate, Gibbs correction, converged orbit."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..constants import ARCSEC_RAD, AU_KM
from ..report.rounding import DASH, fixed, scientific, significant, with_sigma
from ..results import Result, Status
from ..uncertainty.covariance import ElementSigmas, element_sigmas
from .elements import Elements, reference_axes
from .state import State


@dataclass(frozen=True, eq=False, repr=False)
class Stage(Result):
    """One stage of the way from three lines of sight to an orbit.

    Attributes
    ----------
    name : str
        ``Gauss estimate``, ``Gibbs correction``, ``Converged``.
    status : Status
        Whether the stage has numbers, and why not.
    positions_km : ndarray, shape (3, 3)
        Positions at the three observations in the order of the pick, ICRF axes from the centre, at the instants
        when the light left the object (the same-instant positions when directions are geometric).
    state : State or None
        At the time of the middle observation of the pick.
    miss_arcsec : ndarray, shape (3,)
        Angle between each picked line of sight and the direction that this stage's orbit predicts.
    residuals_arcsec : ndarray, shape (n, 2)
        O-C of every observation under this stage's orbit: RA times cos Dec, Dec.
    rms_arcsec : float
        Root mean square of the residuals of all observations, both coordinates.
    """

    name: str
    status: Status
    positions_km: NDArray[np.float64]
    state: State | None
    miss_arcsec: NDArray[np.float64]
    residuals_arcsec: NDArray[np.float64]
    rms_arcsec: float

    @property
    def elements(self) -> Elements | None:
        """Osculating elements of :attr:`state`; None when the stage has no orbit."""
        return None if self.state is None else self.state.elements

    def report_lines(self) -> list[Any]:
        lines: list[Any] = [f"{self.name}: {self.status}"]
        if self.elements is not None:
            lines += self.elements.report_lines()
        return lines


@dataclass(frozen=True, eq=False, repr=False)
class CorrectedStage(Stage):
    """The velocity from three positions by Gibbs' or the Herrick-Gibbs formula.

    Attributes
    ----------
    rule : {"Gibbs", "Herrick-Gibbs"}
        The formula used.
    rule_reason : str
        Why, with both predicted errors where the noise is known and the textbook angle's word beside them.
    coplanarity_deg : float
        Angle of the first position out of the plane of the other two.
    separations_deg : tuple of float
        Angles between the first and second and the second and third position.
    n_vector, d_vector, s_vector : ndarray, shape (3,)
        Gibbs' N (km3), D (km2) and S (km2).
    predicted_error_km_s : dict
        Predicted one-sigma velocity error of each formula; NaN when the noise of the positions is not known.
    """

    rule: str = ""
    rule_reason: str = ""
    coplanarity_deg: float = float("nan")
    separations_deg: tuple[float, float] = (float("nan"), float("nan"))
    n_vector: NDArray[np.float64] = field(default_factory=lambda: np.full(3, np.nan))
    d_vector: NDArray[np.float64] = field(default_factory=lambda: np.full(3, np.nan))
    s_vector: NDArray[np.float64] = field(default_factory=lambda: np.full(3, np.nan))
    predicted_error_km_s: tuple[tuple[str, float], ...] = ()

    def report_lines(self) -> list[Any]:
        lines = super().report_lines()
        first, second = (fixed(angle, 2) for angle in self.separations_deg)
        out_of_plane = abs(self.coplanarity_deg)
        # positions that were computed in one plane leave nothing but rounding
        size = "less than 10⁻⁹°" if out_of_plane < 1e-9 else f"{scientific(out_of_plane)}°"
        lines.insert(1, f"separations {first}° and {second}°, out of one plane by {size}")
        if self.rule_reason != self.status.sentence:
            lines.insert(1, self.rule_reason)
        return lines


@dataclass(frozen=True, eq=False, repr=False)
class Iteration(Result):
    """One pass on the way to the converged orbit.

    Attributes
    ----------
    ranges_km : ndarray, shape (3,)
        Slant ranges at the three observations, in the order of the pick.
    change : float
        Largest relative change of a range from the pass before; NaN for the first.
    miss_arcsec : float
        Largest angle between a line of sight and the direction predicted.
    """

    ranges_km: NDArray[np.float64]
    change: float
    miss_arcsec: float

    def report_lines(self) -> list[Any]:
        ranges = " · ".join(fixed(value, 3) for value in self.ranges_km)
        return [f"ranges {ranges} km, change {scientific(self.change)}, miss {scientific(self.miss_arcsec)}″"]


@dataclass(frozen=True, eq=False, repr=False)
class Candidate(Result):
    """One root of Gauss' equation, followed through the three stages.

    Attributes
    ----------
    letter : str
        Name of the root; A is the outermost.
    method : str
        The method it comes from, as given to ``preliminary``.
    root_km : float
        Distance from the centre at the middle observation, root of the eighth-degree equation.
    admissible : bool
    reason : str
        Why the candidate is rejected, or why it stands where it does in the ranking.
    gauss, gibbs, converged : Stage
    history : tuple of Iteration
        From the Gauss estimate through the correction to the converged orbit.
    ranges_km : ndarray, shape (3,)
        Slant ranges of the converged orbit (of the Gauss estimate when nothing converged).
    covariance : ndarray, shape (6, 6)
        Of the converged state (km, km/s), from the stated sigmas of the three observations; NaN when not converged.
        Three observations leave no redundancy: it says nothing about whether those sigmas are true.
    sigma_range_km : float
        Sigma of the slant range at the middle observation.
    chi : ndarray, shape (n,)
        Length of each observation's residual in units of its stated sigmas.
    rms_others_arcsec : float
        Rms of the residuals of the observations outside the pick; NaN when there are none.
    chi2_others, dof_others, chance_others : float
        Chi-square of those observations with the orbit's own uncertainty included, its degrees of freedom and the
        probability of a larger one; NaN without other observations.
    picked : tuple of int
        Positions of the observations that the orbit was made from.
    """

    letter: str
    method: str
    root_km: float
    admissible: bool
    reason: str
    gauss: Stage
    gibbs: CorrectedStage
    converged: Stage
    history: tuple[Iteration, ...]
    ranges_km: NDArray[np.float64]
    covariance: NDArray[np.float64]
    sigma_range_km: float
    chi: NDArray[np.float64]
    rms_others_arcsec: float
    chi2_others: float
    dof_others: int
    chance_others: float
    picked: tuple[int, ...]
    rows: NDArray[np.int64]
    sigma_arcsec: NDArray[np.float64]

    @property
    def status(self) -> Status:
        return self.converged.status

    @property
    def state(self) -> State | None:
        """State of the converged orbit."""
        return self.converged.state

    @property
    def elements(self) -> Elements | None:
        """Elements of the converged orbit."""
        return self.converged.elements

    @cached_property
    def sigmas(self) -> ElementSigmas | None:
        """One sigma of the converged elements (km, rad, s), to first order; None when not converged."""
        state = self.converged.state
        if state is None or not np.isfinite(self.covariance).all():
            return None
        plain = np.concatenate([state.r_km, state.v_km_s])
        return element_sigmas(plain, self.covariance, state.gm_km3_s2, reference_axes(state.center))

    @property
    def residuals(self) -> Any:
        """O-C of every observation under the converged orbit, as an astropy Table."""
        from astropy.table import Table

        table = Table()
        table["row"] = self.rows + 1
        for column, (name, text) in enumerate((("dra_arcsec", "RA times cos Dec"), ("ddec_arcsec", "Dec"))):
            table[name] = self.converged.residuals_arcsec[:, column]
            table[name].unit = "arcsec"
            table[name].description = f"observed minus computed, {text}"
            table[name].info.format = "+.2f"
        table["sigma_ra_arcsec"] = self.sigma_arcsec[:, 0]
        table["sigma_dec_arcsec"] = self.sigma_arcsec[:, 1]
        table["chi"] = self.chi
        table["chi"].info.format = ".1f"
        table["used"] = np.isin(np.arange(len(self.rows)), self.picked)
        return table

    def report_lines(self) -> list[Any]:
        verdict = "admissible" if self.admissible else "rejected"
        lines: list[Any] = [f"Candidate {self.letter}, {verdict}: {self.reason}"]
        lines.append(self.gibbs.rule_reason)
        lines.append(self.stage_table())
        if self.converged.state is not None:
            others = (
                "No other observations"
                if self.dof_others == 0
                else f"Rms of the other observations {significant(self.rms_others_arcsec, 3)}″"
            )
            lines.append(f"{self.converged.status} {others}.")
        return lines

    def stage_table(self) -> list[list[str]]:
        """Elements in rows, stages in columns, the last column with the sigma of the converged orbit."""
        stages = (self.gauss, self.gibbs, self.converged)
        table = [["element", *(stage.name for stage in stages), "unit"]]
        columns = [element_rows(stage.elements) for stage in stages]
        sigma = sigma_rows(self.elements, self.sigmas)
        names = next((list(column) for column in columns if column), [])
        for name in names:
            unit = next(column[name][1] for column in columns if column)
            cells = [fixed_or_dash(column, name, sigma.get(name)) for column in columns[:2]]
            last = columns[2]
            cells.append(with_sigma(last[name][0], sigma.get(name)) if last else DASH)
            table.append([row_name(name, self.converged.state or self.gauss.state), *cells, unit])
        return table


def row_name(key: str, state: State | None) -> str:
    """Name of an element row for people: about the Earth the periapsis is given as its height."""
    return "perigee height" if key == "q" and state is not None and state.center == "earth" else key


def fixed_or_dash(column: dict[str, tuple[float, str]], name: str, sigma: float | None) -> str:
    if not column:
        return DASH
    if sigma is None or not np.isfinite(sigma) or sigma <= 0:
        return significant(column[name][0], 4)
    return with_sigma(column[name][0], sigma).split(" ±")[0]


def element_rows(elements: Elements | None) -> dict[str, tuple[float, str]]:
    """The elements that a person compares, with their units: km and minutes about the Earth, au and years (Sun)."""
    if elements is None:
        return {}
    earth = elements.center == "earth"
    rows = {
        "a": (elements.a_km, "km") if earth else (elements.a_au, "au"),
        "e": (elements.e, ""),
        "i": (elements.i_deg, "°"),
        "node": (elements.node_deg, "°"),
        "argp": (elements.argp_deg, "°"),
        "M": (elements.M_deg, "°"),
        "q": (elements.periapsis_height_km, "km") if earth else (elements.q_au, "au"),
        "P": (elements.period_s / 60.0, "min") if earth else (elements.period_s / (365.25 * 86400.0), "yr"),
    }
    return rows


def sigma_rows(elements: Elements | None, sigmas: ElementSigmas | None) -> dict[str, float]:
    """Sigmas under the same names and in the same units as :func:`element_rows`."""
    if elements is None or sigmas is None:
        return {}
    earth = elements.center == "earth"
    length = 1.0 if earth else 1.0 / AU_KM
    return {
        "a": sigmas.a_km * length,
        "e": sigmas.e,
        "i": float(np.degrees(sigmas.i_rad)),
        "node": float(np.degrees(sigmas.node_rad)),
        "argp": float(np.degrees(sigmas.argp_rad)),
        "M": float(np.degrees(sigmas.mean_anomaly_rad)),
        "q": sigmas.q_km * length,
        "P": sigmas.period_s / (60.0 if earth else 365.25 * 86400.0),
    }


def arcsec(radians: Any) -> Any:
    return np.asarray(radians) / ARCSEC_RAD
