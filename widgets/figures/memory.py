"""What keeps a figure still while a slider is held."""

from __future__ import annotations

from collections.abc import Callable, Hashable
from typing import Any, TypeVar

T = TypeVar("T")


class ScaleMemory:
    """Scales and placements of one figure from one drawing to the next.

    While ``held`` is true a scale never shrinks, and grows at most once per factor of three; placements stay.
    At rest both settle on what the numbers ask for. One instance serves one figure of one Desk.

    Examples
    --------
    >>> memory = ScaleMemory()
    >>> memory.settle("limit", 1.8, float)
    1.8
    >>> memory.held = True
    >>> memory.settle("limit", 0.5, float), memory.settle("limit", 2.0, float)
    (1.8, 5.4)
    """

    def __init__(self) -> None:
        self.held = False
        self._scales: dict[Hashable, float] = {}
        self._kept: dict[str, tuple[Hashable, Any]] = {}

    def settle(self, key: Hashable, wanted: float, rounded_up: Callable[[float], float]) -> float:
        """The scale to draw with, at least ``wanted`` and a value of ``rounded_up``."""
        before = self._scales.get(key)
        if self.held and before is not None:
            if wanted <= before:
                return before
            wanted = max(wanted, 3.0 * before)
        self._scales[key] = scale = rounded_up(wanted)
        return scale

    def last(self, name: str) -> Any:
        """What was kept under a name by the last drawing, or None."""
        before = self._kept.get(name)
        return None if before is None else before[1]

    def keep(self, name: str, depends_on: Hashable, make: Callable[[], T]) -> T:
        """What ``make`` gave last while held and ``depends_on`` is as it was, else what it gives now."""
        before = self._kept.get(name)
        if self.held and before is not None and before[0] == depends_on:
            kept: T = before[1]
            return kept
        made = make()
        self._kept[name] = (depends_on, made)
        return made
