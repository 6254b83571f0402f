"""One observation as every figure marks it: shape by station, filled when used, boxed when picked."""

from __future__ import annotations

from dataclasses import dataclass

#: Signs of the station shapes in running text.
SHAPE_SIGNS = {"circle": "●", "triangle": "▲", "square": "■", "diamond": "◆", "down": "▼", "plus": "✚"}


@dataclass(frozen=True)
class RowMark:
    """An observation, as far as figures need to know it.

    Parameters
    ----------
    row : int
        Row number as shown, counted from 1.
    t_s : float
        Time, s from the arc's epoch.
    station : str
        Code of the station.
    shape : str
        Shape of the station: circle, triangle, square, diamond, down or plus.
    used : bool
        False for an observation that is out of the solution.
    pick : int
        1, 2 or 3 for a member of the pick, else 0.
    selected : bool
    """

    row: int
    t_s: float
    station: str
    shape: str = "circle"
    used: bool = True
    pick: int = 0
    selected: bool = False

    @property
    def css_class(self) -> str:
        return "mk now u" if self.used else "mk now h"

    @property
    def station_sign(self) -> str:
        return f"{self.station} {SHAPE_SIGNS[self.shape]}"

    @property
    def title(self) -> str:
        return f"row {self.row}, {self.station}" + ("" if self.used else ", out")
