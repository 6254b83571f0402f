"""Which forces act beside the attraction of the centre: a plain description, on or off term by term.

Nothing here reads an ephemeris: positions of Sun, Moon and planets arrive as callables of t_s. What the
terms amount to is in :mod:`firstarc.dynamics.accelerations`.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from firstarc.constants import EARTH_ZONALS, GM_BODIES_KM3_S2, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from firstarc.dynamics.shadow import SHADOWS
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array

#: t_s (n,) -> position (n, 3) in km from the centre, ICRF axes.
Track = Callable[[Array], Array]

#: Gravitational parameters of the two centres, km3/s2.
CENTERS = {"earth": GM_EARTH_KM3_S2, "sun": GM_SUN_KM3_S2}
#: Parameters of the forces whose partials can be asked for.
PARAMETERS = ("area_to_mass_m2_kg", "ballistic_m2_kg")
PLANETS = ("mercury", "venus", "earth", "moon", "mars", "jupiter", "saturn", "uranus", "neptune")


@dataclass(frozen=True)
class Body:
    """An attracting body with its track.

    Parameters
    ----------
    name : str
        Lower case; ``"sun"`` and ``"earth"`` also serve radiation pressure, shadow and zonals.
    position_km : callable
        t_s (n,) -> (n, 3), from the centre of the force model. Not compared: ``source`` stands for it.
    gm_km3_s2 : float
    source : str
        The ephemeris, such as ``"JPL DE421"``.
    """

    name: str
    position_km: Track = field(repr=False, compare=False)
    gm_km3_s2: float
    source: str = ""


@dataclass(frozen=True)
class RadiationPressure:
    """Pressure of sunlight on a sphere.

    Parameters
    ----------
    area_to_mass_m2_kg : float
        May be 0, so that it can be estimated from there.
    reflectivity : float
        Coefficient C_R: 1 absorbs everything, 2 is a mirror facing the Sun. Only its product with area-to-mass
        acts.
    shadow : str or None
        Of the Earth: ``"conical"``, ``"cylindrical"`` or None. Not used about the Sun.
    """

    area_to_mass_m2_kg: float
    reflectivity: float = 1.0
    shadow: str | None = "conical"

    def __post_init__(self) -> None:
        _finite("area_to_mass_m2_kg", self.area_to_mass_m2_kg)
        _finite("reflectivity", self.reflectivity)
        if self.shadow is not None and self.shadow not in SHADOWS:
            raise UsageError(f"shadow={self.shadow!r}; expected 'conical', 'cylindrical' or None")


@dataclass(frozen=True)
class Drag:
    """Drag in the static atmosphere of :mod:`firstarc.dynamics.atmosphere`, which turns with the Earth.

    Parameters
    ----------
    ballistic_m2_kg : float
        C_D A / m; may be 0, so that it can be estimated from there.
    """

    ballistic_m2_kg: float

    def __post_init__(self) -> None:
        _finite("ballistic_m2_kg", self.ballistic_m2_kg)


@dataclass(frozen=True)
class ForceModel:
    """Forces about one centre.

    Parameters
    ----------
    center : str
        ``"earth"`` or ``"sun"``.
    gm_km3_s2 : float
        Of the centre.
    zonals : tuple of float
        J2, J3, J4 (or fewer) of the Earth; empty for none. About the Sun they need the body ``"earth"`` and
        act near it.
    bodies : tuple of Body
        Third bodies. The centre falls freely among them: the indirect term is included.
    relativity : bool
        Schwarzschild term of the centre, in the coordinates of the JPL ephemerides (IERS Conventions 2010, equation
        10.12, beta = gamma = 1).
    radiation : RadiationPressure or None
        About the Earth it needs the body ``"sun"``.
    drag : Drag or None
        About the Earth only.
    pole : tuple of float
        Unit vector on ICRF axes of the axis of zonals, air rotation and flattening: the true (celestial
        intermediate) pole at the epoch of the arc. It is held fixed; in a month it moves by less than 5 arcsec.
    reason : str
        Why these forces, when :func:`firstarc.dynamics.decision.decide` chose them.

    Raises
    ------
    UsageError
        A term lacks what it needs, or a number is not finite.
    """

    center: str
    gm_km3_s2: float
    zonals: tuple[float, ...] = ()
    bodies: tuple[Body, ...] = ()
    relativity: bool = False
    radiation: RadiationPressure | None = None
    drag: Drag | None = None
    pole: tuple[float, float, float] = (0.0, 0.0, 1.0)
    reason: str = field(default="", compare=False)

    def __post_init__(self) -> None:
        if self.center not in CENTERS:
            raise UsageError(f"center={self.center!r}; expected 'earth' or 'sun'")
        if not (np.isfinite(self.gm_km3_s2) and self.gm_km3_s2 > 0.0):
            raise UsageError(f"gm_km3_s2={self.gm_km3_s2!r}; expected a positive number")
        if len(self.zonals) > 3 or not np.all(np.isfinite(self.zonals)):
            raise UsageError(f"zonals={self.zonals!r}; expected at most three finite numbers: J2, J3, J4")
        pole = tuple(float(x) for x in self.pole)
        if len(pole) != 3 or not abs(float(np.linalg.norm(pole)) - 1.0) < 1e-9:
            raise UsageError(f"pole={self.pole!r}; expected a unit vector of three numbers on ICRF axes")
        object.__setattr__(self, "pole", pole)
        object.__setattr__(self, "zonals", tuple(float(x) for x in self.zonals))
        names = [body.name for body in self.bodies]
        if len(set(names)) != len(names):
            raise UsageError(f"bodies name one body twice: {names}")
        if self.center in names:
            raise UsageError(f"bodies hold {self.center!r}, which is the centre; leave it out")
        if self.zonals and self.center == "sun" and "earth" not in names:
            raise UsageError("zonals about the Sun need the body 'earth'; add it to bodies or leave the zonals out")
        if self.radiation is not None and self.center == "earth" and "sun" not in names:
            raise UsageError("radiation about the Earth needs the body 'sun'; add it to bodies")
        if self.drag is not None and self.center != "earth":
            raise UsageError("drag is computed about the Earth only; use center='earth'")

    @property
    def two_body(self) -> bool:
        """True when nothing acts but the centre."""
        return not (
            self.zonals or self.bodies or self.relativity or self.radiation is not None or self.drag is not None
        )

    @property
    def parameters(self) -> tuple[str, ...]:
        """Names of the parameters that this model has."""
        has = (self.radiation is not None, self.drag is not None)
        return tuple(name for name, present in zip(PARAMETERS, has, strict=True) if present)

    def value_of(self, parameter: str) -> float:
        """Value of one of :data:`PARAMETERS`."""
        self._check(parameter)
        if parameter == "ballistic_m2_kg":
            assert self.drag is not None
            return self.drag.ballistic_m2_kg
        assert self.radiation is not None
        return self.radiation.area_to_mass_m2_kg

    def with_value(self, parameter: str, value: float) -> ForceModel:
        """The same model with another value of one of :data:`PARAMETERS`."""
        self._check(parameter)
        if parameter == "ballistic_m2_kg":
            return replace(self, drag=Drag(float(value)))
        assert self.radiation is not None
        return replace(self, radiation=replace(self.radiation, area_to_mass_m2_kg=float(value)))

    def _check(self, parameter: str) -> None:
        if parameter not in PARAMETERS:
            raise UsageError(f"parameter {parameter!r} is unknown; expected one of {', '.join(PARAMETERS)}")
        if parameter not in self.parameters:
            term = "drag=Drag(0.0)" if parameter == "ballistic_m2_kg" else "radiation=RadiationPressure(0.0)"
            raise UsageError(f"the force model has no term for {parameter}; give it {term}")

    @property
    def sentence(self) -> str:
        """What acts, in words."""
        centre = "Earth" if self.center == "earth" else "Sun"
        parts = [f"two-body attraction of the {centre}"]
        if self.zonals:
            count = len(self.zonals)
            parts.append("Earth zonal" + ("", "s J2 and J3", "s J2 to J4")[count - 1] + (" J2" if count == 1 else ""))
        if self.bodies:
            named = [body.name.capitalize() for body in self.bodies]
            listed = ", ".join(named[:-1]) + (" and " if len(named) > 1 else "") + named[-1]
            sources = sorted({body.source for body in self.bodies if body.source})
            parts.append(f"attraction of {listed}" + (f" ({', '.join(sources)})" if sources else ""))
        if self.relativity:
            parts.append(f"the {centre}'s relativistic (Schwarzschild) term")
        if self.radiation is not None:
            light = self.radiation
            text = f"solar radiation pressure with {light.area_to_mass_m2_kg:.4g} m2/kg"
            text += f" times reflectivity {light.reflectivity:.4g}"
            if self.center == "earth":
                text += f", {light.shadow} Earth shadow" if light.shadow else ", no shadow"
            parts.append(text)
        if self.drag is not None:
            parts.append(f"drag with {self.drag.ballistic_m2_kg:.4g} m2/kg in a static atmosphere")
        if len(parts) == 1:
            return f"Two-body attraction of the {centre} only."
        return parts[0][0].upper() + "; ".join(parts)[1:] + "."

    def __str__(self) -> str:
        return self.sentence if not self.reason else f"{self.sentence} {self.reason}"


def _finite(name: str, value: float) -> None:
    if not np.isfinite(value):
        raise UsageError(f"{name}={value!r}; expected a finite number")


def two_body(center: str) -> ForceModel:
    """The attraction of the centre alone."""
    if center not in CENTERS:
        raise UsageError(f"center={center!r}; expected 'earth' or 'sun'")
    return ForceModel(center, CENTERS[center])


def full(
    center: str,
    tracks: Mapping[str, Track],
    pole: tuple[float, float, float] = (0.0, 0.0, 1.0),
    source: str = "",
    radiation: RadiationPressure | None = None,
    drag: Drag | None = None,
    itself: str = "",
) -> ForceModel:
    """Everything that is modelled about a centre.

    About the Earth: zonals to J4, Sun and Moon. About the Sun: the planets and the Moon, the Sun's relativistic term,
    and the Earth's zonals, which matter in a close approach.

    Parameters
    ----------
    center : str
        ``"earth"`` or ``"sun"``.
    tracks : mapping of str to callable
        Positions from the centre: ``"sun"``, ``"moon"``; about the Sun the nine of :data:`PLANETS`.
    pole, radiation, drag
        As in :class:`ForceModel`.
    source : str
        The ephemeris behind the tracks.
    itself : str
        The body whose own orbit it is, when it is one of these: nothing attracts itself.

    Raises
    ------
    UsageError
        A track is missing.
    """
    if center not in CENTERS:
        raise UsageError(f"center={center!r}; expected 'earth' or 'sun'")
    names = ("sun", "moon") if center == "earth" else PLANETS
    missing = [name for name in names if name not in tracks]
    if missing:
        raise UsageError(f"tracks lack {', '.join(missing)}; about the {center} expected {', '.join(names)}")
    bodies = tuple(Body(name, tracks[name], GM_BODIES_KM3_S2[name], source) for name in names if name != itself)
    return ForceModel(
        center,
        CENTERS[center],
        zonals=EARTH_ZONALS,
        bodies=bodies,
        relativity=center == "sun",
        radiation=radiation,
        drag=drag,
        pole=pole,
    )
