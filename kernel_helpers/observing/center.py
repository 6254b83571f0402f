"""Does the object go round the Earth or round the Sun? Given, or decided with the reason."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence

import numpy as np

from firstarc.border.frames import unit_vectors
from firstarc.constants import ARCSEC_RAD, AU_KM, DAY_S, GM_EARTH_KM3_S2
from firstarc.errors import UsageError
from firstarc.observing.records import Designations, Doubt, Records

#: Rate from which an object is taken to go round the Earth, arcsec/s. At this rate a body bound to the Earth
#: is within about 320 000 km, and one on a path about the Sun that crosses ours at 30 km/s would have to be
#: within 0.04 au.
LIMIT_ARCSEC_S = 1.0
#: Rates between these are possible for both kinds.
DOUBTFUL_ARCSEC_S = (0.1, 5.0)

#: Radius of the Earth's Hill sphere, (GM ratio / 3)^(1/3) au, rounded.
EARTH_HOLDS_KM = 1.5e6

_SATELLITE = re.compile(r"(?:19|20)\d\d-\d{3}[A-Z]{1,3}", re.ASCII)
_BODY = re.compile(
    r"(?:[CPDXIA]/)?(?:1[89]|20)\d\d [A-HJ-Y](?:[A-HJ-Z]\d*|\d+)(?:-[A-Z]{1,2})?|\d+[PDI](?:/.*)?|\(\d+\).*",
    re.ASCII,
)


def decide(records: Records, given: str | None) -> tuple[str, str, list[Doubt]]:
    """Centre, the reason in words, and doubts.

    Parameters
    ----------
    records : Records
    given : {"earth", "sun"}, optional
        The caller's word, which is final.

    Raises
    ------
    UsageError
        ``given`` is something else, or there is nothing to decide by.
    """
    if given is not None:
        word = given.strip().lower() if isinstance(given, str) else given
        if word not in ("earth", "sun"):
            raise UsageError(f"center={given!r}: give 'earth', 'sun' or None (decided from the observations)")
        return word, f"given as center={word!r}", []
    rate = median_rate_arcsec_s(records)
    named = _by_designation(records.designations)
    if named is not None:
        center, reason = named
        doubts = []
        slow, fast = DOUBTFUL_ARCSEC_S
        if rate is not None and (rate > fast if center == "sun" else rate < slow):
            doubts.append(
                Doubt(
                    f"{reason}, yet it moves at {_rate_words(rate)}; give center='earth' or center='sun' to settle it"
                )
            )
        return center, reason if rate is None else f"{reason}; it moves at {_rate_words(rate)}", doubts
    if rate is None:
        raise UsageError(
            "center: neither a designation nor two observations at different times say whether the object "
            "goes round the Earth or the Sun; give center='earth' or center='sun'"
        )
    earth = rate >= LIMIT_ARCSEC_S
    reach_km = (GM_EARTH_KM3_S2 / (rate * ARCSEC_RAD) ** 2) ** (1.0 / 3.0) if rate > 0 else math.inf
    motion = f"{_rate_words(rate)} (median of neighbouring observations)"
    if earth:
        near_au = 30.0 / (rate * ARCSEC_RAD) / AU_KM
        reason = (
            f"it moves at {motion}; a body that passes at 30 km/s on an orbit about the Sun would have to "
            f"be within {near_au:.2g} au"
        )
    else:
        radius = f"a radius of {_km_words(reach_km)}" if reach_km < 1e9 else "no bound at all"
        reason = (
            f"it moves at only {motion}; a circular orbit about the Earth with that motion would have "
            f"{radius}, and the Earth holds orbits out to about {_km_words(EARTH_HOLDS_KM)}"
        )
    doubts = []
    if DOUBTFUL_ARCSEC_S[0] < rate < DOUBTFUL_ARCSEC_S[1]:
        other = "sun" if earth else "earth"
        doubts.append(
            Doubt(
                f"the centre was taken as the {'Earth' if earth else 'Sun'} from a rate of "
                f"{_rate_words(rate)}, which both kinds of object can have; give center={other!r} to try "
                "the other"
            )
        )
    return ("earth" if earth else "sun"), reason, doubts


def _by_designation(designations: Sequence[Designations]) -> tuple[str, str] | None:
    if not designations:
        return None
    if all(d.art_sat or _SATELLITE.fullmatch(d.name) for d in designations):
        return "earth", "designated as an artificial satellite (" + (
            designations[0].art_sat or designations[0].name
        ) + ")"
    if all(d.perm_id or d.prov_id or _BODY.fullmatch(d.name) for d in designations):
        first = designations[0]
        shown = first.perm_id or first.prov_id or first.name
        return "sun", f"designated as a Sun-orbiting body ({shown})"
    return None


def median_rate_arcsec_s(records: Records) -> float | None:
    """Median rate on the sky between neighbouring observations of one object, arcsec/s, or None."""
    los = unit_vectors(records.ra_deg, records.dec_deg)
    names = np.array([d.best for d in records.designations])
    rates: list[float] = []
    for name in dict.fromkeys(names.tolist()):
        index = np.flatnonzero(names == name)
        t_s = ((records.tai1[index] - records.tai1[index[0]]) + (records.tai2[index] - records.tai2[index[0]])) * DAY_S
        order = index[np.argsort(t_s, kind="stable")]
        step_s = np.diff(np.sort(t_s, kind="stable"))
        a, b = los[order[:-1]], los[order[1:]]
        angle = 2.0 * np.arcsin(np.clip(np.linalg.norm(a - b, axis=1) / 2.0, 0.0, 1.0))
        later = step_s > 0.01
        rates += (angle[later] / ARCSEC_RAD / step_s[later]).tolist()
    return float(np.median(rates)) if rates else None


def _rate_words(rate: float) -> str:
    if rate >= 1000.0:
        return f"{rate / 3600.0:.3g}°/s"
    if rate >= 1.0:
        return f"{rate:.3g}″/s"
    return f"{rate * 3600.0:.3g}″/h"


def _km_words(km: float) -> str:
    """Two significant digits, thousands set apart."""
    return f"{float(f'{km:.2g}'):,.0f} km".replace(",", "\u202f")
