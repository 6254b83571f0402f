"""Figures of the Desk as plain geometry in px: each function takes arrays, returns what a painter paints.

The painters: the browser's, and :mod:`firstarc.widgets.figures.svg_painter` for the picture kept in the cell.
"""

from firstarc.widgets.figures.convergence import convergence
from firstarc.widgets.figures.frame import FrameWriter
from firstarc.widgets.figures.margin_bar import margin_bar
from firstarc.widgets.figures.marks import RowMark
from firstarc.widgets.figures.memory import ScaleMemory
from firstarc.widgets.figures.orbit_space import SpaceOrbit, SpaceRow, orbit_space
from firstarc.widgets.figures.residuals import residuals
from firstarc.widgets.figures.root_function import Root, root_function
from firstarc.widgets.figures.sky_track import Track, sky_track

__all__ = [
    "FrameWriter",
    "Root",
    "RowMark",
    "ScaleMemory",
    "SpaceOrbit",
    "SpaceRow",
    "Track",
    "convergence",
    "margin_bar",
    "orbit_space",
    "residuals",
    "root_function",
    "sky_track",
]
