"""What may be estimated besides the six numbers of the state."""

from __future__ import annotations

from dataclasses import dataclass

from firstarc.errors import UsageError


def _checked(what: str, sigma: float | None) -> None:
    if sigma is not None and not sigma > 0.0:
        raise UsageError(f"{what}: prior_sigma is {sigma!r}; give a positive number, or None for no prior knowledge")


@dataclass(frozen=True)
class ClockOffset:
    """Seconds to be added to the recorded times of one station.

    Parameters
    ----------
    station : int
        Index of the station, as in ``Measurements.station``.
    prior_s, prior_sigma_s : float
        Value held before the observations speak, and its sigma; None for no prior knowledge.
    """

    station: int
    prior_s: float = 0.0
    prior_sigma_s: float | None = None

    def __post_init__(self) -> None:
        _checked("clock offset", self.prior_sigma_s)

    @property
    def names(self) -> tuple[str, ...]:
        return (f"clock[{self.station}]_s",)

    @property
    def prior(self) -> tuple[float, ...]:
        return (self.prior_s,)

    @property
    def prior_sigma(self) -> float | None:
        return self.prior_sigma_s


@dataclass(frozen=True)
class StationOffset:
    """East, north and up displacement (km) of one station from its recorded place.

    Parameters
    ----------
    station : int
    prior_km : tuple of float
        East, north, up.
    prior_sigma_km : float or None
        Sigma of each of the three.
    """

    station: int
    prior_km: tuple[float, float, float] = (0.0, 0.0, 0.0)
    prior_sigma_km: float | None = None

    def __post_init__(self) -> None:
        _checked("station offset", self.prior_sigma_km)

    @property
    def names(self) -> tuple[str, ...]:
        return tuple(f"{axis}[{self.station}]_km" for axis in ("east", "north", "up"))

    @property
    def prior(self) -> tuple[float, ...]:
        return self.prior_km

    @property
    def prior_sigma(self) -> float | None:
        return self.prior_sigma_km


@dataclass(frozen=True)
class ForceParameter:
    """A parameter of the motion itself, such as area-to-mass.

    Parameters
    ----------
    name : str
        One of the motion's ``parameter_names``.
    start : float or None
        Where the fit starts, and the prior value when there is one; None for the value the motion holds.
    prior_sigma : float or None
    """

    name: str
    start: float | None = None
    prior_sigma: float | None = None

    def __post_init__(self) -> None:
        _checked(self.name, self.prior_sigma)

    @property
    def names(self) -> tuple[str, ...]:
        return (self.name,)

    @property
    def prior(self) -> tuple[float, ...]:
        return (float("nan") if self.start is None else self.start,)


Parameter = ClockOffset | StationOffset | ForceParameter
