"""The sigma of a direction when the observer states none.

Defaults by the way of observing, after P. Vereš, D. Farnocchia, S. R. Chesley, A. B. Chamberlin,
"Statistical analysis of astrometric errors for the most productive asteroid surveys", Icarus 296 (2017)
139-149, the rules for stations without statistics of their own. The values are recalled, not read again.
They are averages over observers: a stated sigma is always better.
"""

from __future__ import annotations

import math

SOURCE = "Vereš et al. 2017"

#: ADES modes whose sigma does not depend on anything else, arcsec.
_BY_MODE = {"OCC": 0.2, "MER": 0.5, "ENC": 0.75, "MIC": 2.0}
_ELECTRONIC = frozenset({"CCD", "CMO", "VID", "TDI"})


def default_sigma_arcsec(mode: str, catalogue: str, year: int) -> tuple[float, str]:
    """Sigma of each coordinate, arcsec, and for what it stands.

    Parameters
    ----------
    mode : str
        ADES mode; empty when not stated.
    catalogue : str
        ADES star catalogue; empty or ``UNK`` when not stated.
    year : int
        Calendar year of the observation; photographic plates became better.
    """
    mode = mode.upper()
    if mode in _BY_MODE:
        return _BY_MODE[mode], f"mode {mode}"
    if mode == "PHO":
        if year < 1890:
            return 10.0, "photographic, before 1890"
        return (5.0, "photographic, 1890 to 1949") if year < 1950 else (2.5, "photographic, from 1950")
    named = catalogue.upper() not in ("", "UNK")
    if mode in _ELECTRONIC:
        return (1.0, f"{mode} with a star catalogue") if named else (1.5, f"{mode}, no star catalogue named")
    return 1.5, "manner of observing not stated"


def with_rounding(sigma_arcsec: float, step_arcsec: float) -> float:
    """Sigma with the rounding of the written value; a step spreads evenly, its sigma is step/sqrt(12)."""
    return math.hypot(sigma_arcsec, step_arcsec / math.sqrt(12.0))
