"""A position and a velocity at an epoch."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..constants import DAY_S, GM_EARTH_KM3_S2, GM_SUN_KM3_S2
from ..errors import UsageError
from ..report.rounding import fixed
from ..results import Result
from ..twobody.kepler import propagate
from .elements import Elements, elements_of, epoch_text, reference_axes

if TYPE_CHECKING:
    from astropy.time import Time

GM_KM3_S2 = {"earth": GM_EARTH_KM3_S2, "sun": GM_SUN_KM3_S2}


def tdb_pair(epoch: Any, argument: str = "epoch") -> tuple[float, float]:
    """Two-part TDB Julian date of an astropy Time, or the pair itself."""
    if isinstance(epoch, tuple) and len(epoch) == 2:
        return float(epoch[0]), float(epoch[1])
    tdb = getattr(epoch, "tdb", None)
    if tdb is None or not getattr(epoch, "isscalar", False):
        raise UsageError(
            f"{argument} must be one astropy Time (any scale), got {epoch!r}; "
            'for example Time("2031-04-17T21:23:27.30", scale="utc")'
        )
    # Plain floats: results stay picklable without astropy and hash-free comparisons stay exact.
    return float(tdb.jd1), float(tdb.jd2)


@dataclass(frozen=True, eq=False, repr=False, init=False)
class State(Result):
    """Position and velocity on ICRF axes.

    Parameters
    ----------
    r_km, v_km_s : array_like, shape (3,)
        Position (km) and velocity (km/s), ICRF axes, from the centre of ``center``.
    epoch : astropy.time.Time
        Any scale; kept as a two-part TDB Julian date in ``epoch_tdb``.
    center : {"earth", "sun"}
        Geocentric or heliocentric.

    Raises
    ------
    UsageError
        A vector is not three finite numbers, the centre is unknown, or the epoch is not one Time.
    """

    r_km: NDArray[np.float64]
    v_km_s: NDArray[np.float64]
    epoch_tdb: tuple[float, float]
    center: str

    def __init__(self, r_km: Any, v_km_s: Any, epoch: Any, center: str):
        for name, given in (("r_km", r_km), ("v_km_s", v_km_s)):
            try:
                vector = np.array(given, dtype=np.float64)
            except (TypeError, ValueError):
                vector = np.empty(0)
            if vector.shape != (3,) or not np.isfinite(vector).all():
                raise UsageError(f"{name} must be three finite numbers, got {given!r}")
            object.__setattr__(self, name, vector)
        if center not in GM_KM3_S2:
            raise UsageError(f'center must be "earth" or "sun", got {center!r}')
        object.__setattr__(self, "epoch_tdb", tdb_pair(epoch))
        object.__setattr__(self, "center", center)
        self.__post_init__()

    @cached_property
    def epoch(self) -> Time:
        """Epoch (astropy Time, TDB)."""
        from astropy.time import Time

        return Time(*self.epoch_tdb, format="jd", scale="tdb")

    @property
    def gm_km3_s2(self) -> float:
        """Gravitational parameter of the centre used for the elements."""
        return GM_KM3_S2[self.center]

    @cached_property
    def elements(self) -> Elements:
        """Osculating elements; about the Sun on the J2000 ecliptic, about the Earth on the ICRF equator."""
        return elements_of(self.r_km, self.v_km_s, self.epoch_tdb, self.center, self.gm_km3_s2)

    def propagated(self, epoch: Any, forces: str | None = None) -> State:
        """The state at another epoch, by two-body motion.

        Parameters
        ----------
        epoch : astropy.time.Time
        forces : None or "two-body"
            Two-body motion is the only force model of this version.
        """
        if forces not in (None, "two-body"):
            raise UsageError(f'forces must be None or "two-body", got {forces!r}')
        jd1, jd2 = tdb_pair(epoch)
        dt_s = ((jd1 - self.epoch_tdb[0]) + (jd2 - self.epoch_tdb[1])) * DAY_S
        r_km, v_km_s = propagate(self.r_km[None], self.v_km_s[None], np.array([dt_s]), self.gm_km3_s2)
        return State(r_km[0], v_km_s[0], (jd1, jd2), self.center)

    def to_orbit(self) -> Any:
        """This state as an ``Orbit`` of boinor (Python 3.11 and later) or poliastro (3.10)."""
        from astropy import units as u

        bodies, twobody, frames = _orbit_library()
        body = bodies.Earth if self.center == "earth" else bodies.Sun
        return twobody.Orbit.from_vectors(
            body,
            self.r_km * u.km,
            self.v_km_s * (u.km / u.s),
            epoch=self.epoch,
            plane=frames.Planes.EARTH_EQUATOR,
        )

    @classmethod
    def from_orbit(cls, orbit: Any) -> State:
        """A state from an ``Orbit`` of boinor or poliastro about the Earth or the Sun.

        Orbits given on the ecliptic plane are turned to ICRF axes.
        """
        from astropy import units as u

        name = orbit.attractor.name.lower()
        if name not in GM_KM3_S2:
            raise UsageError(f"the orbit is about {orbit.attractor.name}; firstarc knows the Earth and the Sun")
        turn = reference_axes("sun").T if "ECLIPTIC" in orbit.plane.name else np.eye(3)
        return cls(turn @ orbit.r.to_value(u.km), turn @ orbit.v.to_value(u.km / u.s), orbit.epoch, name)

    def report_lines(self) -> list[Any]:
        origin = "geocentric" if self.center == "earth" else "heliocentric"
        rows = [["", "x", "y", "z", "unit"]]
        rows.append(["r", *(fixed(x, 6) for x in self.r_km), "km"])
        rows.append(["v", *(fixed(x, 9) for x in self.v_km_s), "km/s"])
        return [f"State, {origin}, ICRF axes, epoch {epoch_text(self.epoch_tdb)}", rows]


def _orbit_library() -> tuple[Any, Any, Any]:
    try:
        import boinor.bodies as bodies
        import boinor.frames as frames
        import boinor.twobody as twobody
    except ImportError:
        try:
            import poliastro.bodies as bodies  # type: ignore[no-redef]
            import poliastro.frames as frames  # type: ignore[no-redef]
            import poliastro.twobody as twobody  # type: ignore[no-redef]
        except ImportError as error:
            raise UsageError(
                "to_orbit needs boinor (Python 3.11 and later) or poliastro (Python 3.10): pip install boinor"
            ) from error
    return bodies, twobody, frames
