"""The least-squares orbit over all observations, as the analyst reads it."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..constants import ARCSEC_RAD, EARTH_RADIUS_KM, SUN_RADIUS_KM
from ..errors import UsageError
from ..fit.fitted import LeastSquares
from ..fit.predicted_residuals import predicted_residuals
from ..fit.verdicts import RIVAL_CHI2, Verdicts
from ..observing.observations import Observations
from ..preliminary.ranging import sample
from ..report.rounding import fixed, scientific, sigma_decimals, significant, with_sigma
from ..results import Code, Result, Status
from ..uncertainty.covariance import ElementSigmas, element_sigmas
from .elements import Elements, reference_axes
from .preliminary import sample_lines
from .stages import element_rows, row_name, sigma_rows
from .state import State


@dataclass(frozen=True, eq=False, repr=False)
class Estimate(Result):
    """A parameter estimated beside the state, with its sigma.

    Attributes
    ----------
    name : str
        Such as ``clock of BRN`` or ``east of BRN``.
    value, sigma : float
    unit : str
    """

    name: str
    value: float
    sigma: float
    unit: str

    def report_lines(self) -> list[Any]:
        return [f"{self.name}: {with_sigma(self.value, self.sigma, self.unit)}"]


@dataclass(frozen=True, eq=False, repr=False)
class OrbitFit(Result):
    """A weighted least-squares orbit.

    Attributes
    ----------
    state : State
        At :attr:`epoch`, ICRF axes.
    covariance : ndarray, shape (6, 6)
        Of the state (km, km/s); NaN when the observations leave a direction free. It holds what the stated sigmas
        give, estimated parameters included; ``verdicts`` says whether it may be used.
    status : Status
        Whether the iteration converged.
    verdicts : Verdicts
        Converged? redundant? well conditioned? consistent with the sigmas? covariance usable linearly? single?
    determined : bool
        False: the data fix no single orbit, and ``sample`` holds weighted ones.
    chi2, dof : float, int
    rms_arcsec : float
        Of the used directions, both coordinates.
    used : ndarray of bool, shape (n,)
    reasons : tuple of str
        Why each observation is in or out.
    residuals_arcsec, sigma_arcsec : ndarray, shape (n, 2)
        O-C (RA times cos Dec, Dec) and the sigmas in force.
    chi : ndarray, shape (n,)
        Length of each residual in sigmas.
    estimates : tuple of Estimate
        Clock and station offsets and force parameters that were asked for.
    forces, forces_reason : str
        The force model in words, and why it was chosen.
    start : str
        Where the fit began.
    other_minima : tuple of State
    notes : tuple of str
        What the fit did that the numbers do not say.
    """

    state: State
    covariance: NDArray[np.float64]
    status: Status
    verdicts: Verdicts
    determined: bool
    chi2: float
    dof: int
    rms_arcsec: float
    used: NDArray[np.bool_]
    reasons: tuple[str, ...]
    residuals_arcsec: NDArray[np.float64]
    sigma_arcsec: NDArray[np.float64]
    chi: NDArray[np.float64]
    rows: NDArray[np.int64]
    estimates: tuple[Estimate, ...]
    forces: str
    forces_reason: str
    start: str
    iterations: int
    other_minima: tuple[State, ...]
    notes: tuple[str, ...]
    center: str
    observations: Observations = field(compare=False)
    solution: LeastSquares = field(compare=False)
    asked_forces: Any = field(compare=False)
    asked_estimates: tuple[str, ...] = field(compare=False)

    @cached_property
    def sample(self) -> Any:
        """Weighted orbits over the admissible region where no single orbit is determined, else None.

        Two-body orbits from ranging (:mod:`firstarc.preliminary.ranging`) over the used observations; its ``status``
        says when they do not represent the observations.
        """
        if self.determined:
            return None
        lines = self.observations.sight_lines
        inside = np.flatnonzero(self.used)
        found = sample(
            lines.los[inside],
            lines.observer_km[inside],
            lines.t_s[inside],
            self.state.gm_km3_s2,
            center_velocity_km_s=lines.center_velocity_km_s[inside],
            light_time=lines.light_time,
            sigma_rad=self.sigma_arcsec[inside] * ARCSEC_RAD,
            body_radius_km=EARTH_RADIUS_KM if self.center == "earth" else SUN_RADIUS_KM,
        )
        least = float(np.min(found.chi2, initial=np.inf, where=np.isfinite(found.chi2)))
        if not found.status.ok or least <= self.chi2 + RIVAL_CHI2:
            return found
        # The raster passed by what the iteration found: its weights say nothing about these observations.
        words = (
            f"The sample misses the observations: its least chi-square is {chi2_text(least)}, that of the fit "
            f"{chi2_text(self.chi2)}. It must not be used."
        )
        return replace(found, status=Status(Code.NOT_CONVERGED, words))

    @property
    def epoch(self) -> Any:
        """Epoch of the state (astropy Time, TDB)."""
        return self.state.epoch

    @property
    def elements(self) -> Elements:
        """Osculating elements of the state."""
        return self.state.elements

    @cached_property
    def sigmas(self) -> ElementSigmas | None:
        """One sigma of the elements (km, rad, s), to first order; None without a covariance."""
        if not np.isfinite(self.covariance).all():
            return None
        plain = np.concatenate([self.state.r_km, self.state.v_km_s])
        return element_sigmas(plain, self.covariance, self.state.gm_km3_s2, reference_axes(self.center))

    @property
    def covariance_rtn(self) -> NDArray[np.float64]:
        """Covariance (6, 6) on radial, transverse (along) and normal (cross) axes of the state."""
        radial = self.state.r_km / np.linalg.norm(self.state.r_km)
        normal = np.cross(self.state.r_km, self.state.v_km_s)
        normal = normal / np.linalg.norm(normal)
        turn = np.stack([radial, np.cross(normal, radial), normal])
        both = np.kron(np.eye(2), turn)
        return np.asarray(both @ self.covariance @ both.T)

    @property
    def residuals(self) -> Any:
        """O-C of every observation, as an astropy Table."""
        from astropy.table import Table

        table = Table()
        table["row"] = self.rows + 1
        for k, (name, words) in enumerate((("dra_arcsec", "RA times cos Dec"), ("ddec_arcsec", "Dec"))):
            table[name] = self.residuals_arcsec[:, k]
            table[name].unit = "arcsec"
            table[name].description = f"observed minus computed, {words}"
            table[name].info.format = "+.2f"
        table["sigma_ra_arcsec"] = self.sigma_arcsec[:, 0]
        table["sigma_dec_arcsec"] = self.sigma_arcsec[:, 1]
        table["chi"] = self.chi
        for name in ("sigma_ra_arcsec", "sigma_dec_arcsec", "chi"):
            table[name].info.format = ".2f"
        table["used"] = self.used
        table["reason"] = list(self.reasons)
        return table

    def residuals_of(self, obs: Observations) -> Any:
        """O-C, with predicted sigma, of observations that were not in the fit, as an astropy Table.

        Estimated offsets are applied to the stations they belong to.

        Parameters
        ----------
        obs : Observations
            About the same centre.

        Returns
        -------
        astropy.table.Table
            ``dra_arcsec``, ``ddec_arcsec``, their predicted sigmas (the observation's own and the orbit's together),
            and ``chi``, the length of the residual in those.

        Raises
        ------
        UsageError
            The centres differ, or the fit has no covariance.
        """
        from astropy.table import Table

        if obs.center != self.center:
            raise UsageError(f"the fit is about the {self.center}, the observations about the {obs.center}")
        from .fitting import prediction_model

        model, solution = prediction_model(self, obs)
        found = predicted_residuals(solution, model)
        arcsec = np.degrees(found.residual[:, :2]) * 3600.0
        sigma = np.degrees(found.sigma[:, :2]) * 3600.0
        table = Table()
        table["row"] = np.asarray(obs.rows) + 1
        table["dra_arcsec"], table["ddec_arcsec"] = arcsec[:, 0], arcsec[:, 1]
        table["sigma_ra_arcsec"], table["sigma_dec_arcsec"] = sigma[:, 0], sigma[:, 1]
        table["chi"] = np.sqrt(found.chi2)
        for name in table.colnames[1:]:
            table[name].info.format = ".2f"
        return table

    def report_lines(self) -> list[Any]:
        count, inside = len(self.used), int(self.used.sum())
        verdict = "Determined." if self.determined else "Not determined."
        rms = significant(self.rms_arcsec, 2) if self.rms_arcsec >= 1e-3 else scientific(self.rms_arcsec, 1)
        ending = "Converged." if self.status.ok else str(self.status)
        lines: list[Any] = [
            f"Least-squares orbit about the {'Earth' if self.center == 'earth' else 'Sun'}. {verdict} "
            f"{self.verdicts.sentence}",
            f"{inside} of {count} observations in the fit, rms {rms}″, chi-square {chi2_text(self.chi2)} "
            f"for {self.dof} degrees of freedom. {ending}",
            f"Forces: {self.forces} {self.forces_reason}".strip(),
        ]
        lines.append(self.element_table())
        lines += [f"{one.name}: {with_sigma(one.value, one.sigma, one.unit)}" for one in self.estimates]
        out = [k for k in range(count) if not self.used[k]]
        lines += [f"Row {int(self.rows[k]) + 1} is out: {self.reasons[k]}" for k in out[:12]]
        if len(out) > 12:
            lines.append(f"{len(out) - 12} more rows are out; see .residuals.")
        lines += list(self.notes)
        if self.sample is not None:
            lines += sample_lines(self.sample, self.center)
        return lines

    def element_table(self) -> list[list[str]]:
        """Elements with their sigmas; values alone where no single orbit is determined."""
        sigma = sigma_rows(self.elements, self.sigmas) if self.determined else {}
        # without a single orbit the numbers are those of one that fits, and are not to be read as the answer
        table = [["element", "value" if self.determined else "one of many", "sigma", "unit"]]
        for name, (value, unit) in element_rows(self.elements).items():
            if not math.isfinite(value):
                continue
            s = sigma.get(name)
            if s is None or not math.isfinite(s) or s <= 0.0:
                table.append([row_name(name, self.state), significant(value, 3), "", unit])
            else:
                places = sigma_decimals(s)
                table.append([row_name(name, self.state), fixed(value, places), fixed(s, places), unit])
        return table


def chi2_text(value: float) -> str:
    """A chi-square to three digits."""
    return significant(value, 3) if 1e-3 <= value < 1e6 else scientific(value)
