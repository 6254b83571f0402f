"""The one binary frame in which the points of every line cross to the browser."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import ArrayLike, NDArray


class FrameWriter:
    """Collects polylines and hands them over as little-endian float32 numbers.

    One writer serves all figures of a scene; :meth:`add` says where a polyline lies in it.

    Examples
    --------
    >>> frame = FrameWriter()
    >>> frame.add([[0, 0], [10, 5]]), frame.add([[1, 2, 3]])
    ((0, 2), (4, 1))
    >>> len(frame.to_bytes())
    28
    """

    def __init__(self) -> None:
        self._parts: list[bytes] = []
        self._floats = 0

    def add(self, points: ArrayLike) -> tuple[int, int]:
        """Append points of shape (n, 2) or (n, 3); return the offset in floats and n.

        Raises
        ------
        ValueError
            If the points have another shape or one of them is not finite: a painter could not draw it.
        """
        block = np.ascontiguousarray(points, dtype="<f4")
        if block.ndim != 2 or block.shape[1] not in (2, 3):
            raise ValueError(f"points of a line have shape (n, 2) or (n, 3), not {block.shape}")
        if not np.isfinite(block).all():
            raise ValueError("points of a line are finite numbers; split the line where it has none")
        offset = self._floats
        self._parts.append(block.tobytes())
        self._floats += block.size
        return offset, block.shape[0]

    def line(self, css_class: str, points: ArrayLike) -> tuple[str, str, int, int]:
        """Append a polyline and return it as an item of a flat figure."""
        offset, count = self.add(points)
        return ("line", css_class, offset, count)

    def lines(self, css_class: str, runs: Iterable[ArrayLike]) -> list[tuple[str, str, int, int]]:
        """Several polylines of one class as items of a flat figure."""
        return [self.line(css_class, run) for run in runs]

    def to_bytes(self) -> bytes:
        """The whole frame."""
        return b"".join(self._parts)


def points_of(frame: bytes, offset: int, count: int, columns: int) -> NDArray[np.float32]:
    """Read points of shape (count, columns) back from a frame."""
    flat = np.frombuffer(frame, dtype="<f4", count=count * columns, offset=4 * offset)
    return flat.reshape(count, columns)
