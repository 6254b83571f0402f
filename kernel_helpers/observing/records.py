"""The recorded values as plain arrays: what an input said, nothing added."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

from firstarc.observing.read_only_arrays import ReadOnlyArrays
from firstarc.observing.stations import Site


@dataclass(frozen=True)
class Designations:
    """What a row calls its object. Empty text where the input has none.

    ``perm_id``, ``prov_id`` (Sun-orbiting bodies), ``art_sat`` (international designation of a satellite),
    ``trk_sub`` (the observer's own tracklet name) are the ADES fields; ``name`` is the column ``object`` of a
    table.
    """

    perm_id: str = ""
    prov_id: str = ""
    art_sat: str = ""
    trk_sub: str = ""
    name: str = ""

    @property
    def best(self) -> str:
        """The designation that says most: name, permanent, provisional, satellite, tracklet."""
        return self.name or self.perm_id or self.prov_id or self.art_sat or self.trk_sub


@dataclass(frozen=True)
class Doubt:
    """A warning, and the row numbers it is about (None: the whole input)."""

    text: str
    rows: tuple[int, ...] | None = None


@dataclass(frozen=True, eq=False)
class Records(ReadOnlyArrays):
    """Recorded observations, one array per quantity, all of length n.

    Attributes
    ----------
    row : int array
        0-based number in the loaded input.
    where : tuple of str
        Place in the input, such as ``"line 7"``.
    tai1, tai2 : ndarray
        Two-part TAI Julian dates.
    time_text : tuple of str
        UTC as written.
    ra_deg, dec_deg : ndarray
        As written, on ICRF axes.
    sigma_ra_arcsec, sigma_dec_arcsec, corr, sigma_time_s : ndarray
        Sigma of RA times cos Dec and of Dec, their correlation, sigma of the time (0 when not stated).
    range_km, sigma_range_km : ndarray
        Measured slant range and its sigma; NaN where none was measured.
    sigma_stated : bool array
        False where a default sigma stands in.
    site_index : int array
        Into ``sites``.
    sites : tuple of Site
    designations : tuple of Designations
    others : tuple of (str, tuple of str)
        Columns that are kept but not used.
    """

    row: NDArray[np.int64]
    where: tuple[str, ...]
    tai1: NDArray[np.float64]
    tai2: NDArray[np.float64]
    time_text: tuple[str, ...]
    ra_deg: NDArray[np.float64]
    dec_deg: NDArray[np.float64]
    sigma_ra_arcsec: NDArray[np.float64]
    sigma_dec_arcsec: NDArray[np.float64]
    corr: NDArray[np.float64]
    sigma_time_s: NDArray[np.float64]
    range_km: NDArray[np.float64]
    sigma_range_km: NDArray[np.float64]
    sigma_stated: NDArray[np.bool_]
    site_index: NDArray[np.int64]
    sites: tuple[Site, ...]
    designations: tuple[Designations, ...]
    others: tuple[tuple[str, tuple[str, ...]], ...] = ()

    def __len__(self) -> int:
        return len(self.row)

    def taken(self, positions: Sequence[int] | NDArray[np.int64]) -> Records:
        """The rows at these positions, in this order."""
        index = np.asarray(positions, dtype=np.int64)
        changes: dict[str, object] = {}
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                changes[field.name] = value[index]
            elif field.name == "others":
                changes["others"] = tuple((name, tuple(texts[i] for i in index)) for name, texts in value)
            elif field.name != "sites":
                changes[field.name] = tuple(value[i] for i in index)
        return replace(self, **changes)  # type: ignore[arg-type]

    def same_as(self, other: Records) -> bool:
        """True when every recorded value is the same."""
        for field in fields(self):
            mine, theirs = getattr(self, field.name), getattr(other, field.name)
            if isinstance(mine, np.ndarray):
                same = np.array_equal(mine, theirs, equal_nan=mine.dtype.kind == "f")
            else:
                same = mine == theirs
            if not same:
                return False
        return True
