"""Dataclasses whose arrays nobody changes, not even after unpickling."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np


@dataclass(frozen=True, eq=False)
class ReadOnlyArrays:
    """Base of records that are shared: writing into one of their arrays raises ``ValueError``."""

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    def __setstate__(self, state: dict[str, object]) -> None:
        self.__dict__.update(state)
        self.__post_init__()
