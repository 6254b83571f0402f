"""Bodies on circles: smooth tracks that need no ephemeris (invented geometry, sizes as in the solar system)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from firstarc.constants import AU_KM


@dataclass(frozen=True)
class Circle:
    """A body on a circle about the centre: radius km, rate rad/s, phase and inclination rad."""

    radius_km: float
    rate_rad_s: float
    phase_rad: float = 0.0
    incl_rad: float = 0.0

    def __call__(self, t_s):
        a = self.rate_rad_s * np.asarray(t_s, float) + self.phase_rad
        c, s = np.cos(a), np.sin(a)
        return self.radius_km * np.stack([c, s * np.cos(self.incl_rad), s * np.sin(self.incl_rad)], axis=-1)


DAY = 86400.0
ABOUT_EARTH = {
    "sun": Circle(AU_KM, 2.0 * np.pi / (365.25 * DAY), 0.3, 0.409),
    "moon": Circle(384400.0, 2.0 * np.pi / (27.32 * DAY), 1.0, 0.45),
}
#: radius in au, period in days, phase, inclination
_PLANETS = {
    "mercury": (0.387, 88.0, 0.4, 0.5),
    "venus": (0.723, 224.7, 1.4, 0.43),
    "earth": (1.0, 365.25, 3.4, 0.409),
    "mars": (1.524, 687.0, 5.0, 0.43),
    "jupiter": (5.2, 4332.6, 2.0, 0.4),
    "saturn": (9.55, 10759.0, 4.0, 0.4),
    "uranus": (19.2, 30688.0, 1.0, 0.41),
    "neptune": (30.1, 60182.0, 0.1, 0.38),
}
ABOUT_SUN = {n: Circle(r * AU_KM, 2.0 * np.pi / (p * DAY), f, i) for n, (r, p, f, i) in _PLANETS.items()}


def moon_of_the_sun(t_s):
    return ABOUT_SUN["earth"](t_s) + ABOUT_EARTH["moon"](t_s)


ABOUT_SUN["moon"] = moon_of_the_sun
POLE = (0.002, -0.001, float(np.sqrt(1.0 - 0.002**2 - 0.001**2)))

#: Invented orbits, km and km/s: about the Earth low, geosynchronous, long ellipse; about the Sun near and far.
LOW = np.array([6800.0, 0.0, 100.0, 0.1, 4.9, 5.85])
GEOSYNCHRONOUS = np.array([42164.0, 0.0, 0.0, 0.0, 3.0746, 0.1])
LONG_ELLIPSE = np.array([-1000.0, -6500.0, 2000.0, 9.5, -1.0, 2.5])
#: a long ellipse whose perigee lies in the shadow
SHADED_ELLIPSE = np.array([-6800.0, -800.0, 300.0, 1.0, -9.2, -1.0])
NEAR_EARTH = np.array([2.0e8, 1.0e8, 2e7, -9.0, 20.0, 1.0])
MAIN_BELT = np.array([3.5e8, 1.0e8, 2e7, -5.0, 17.0, 1.0])
