"""Initial orbit determination in a notebook: about the Earth and about the Sun.

``import firstarc as fa``, ``obs = fa.load("night.psv")``, ``fa.Desk(obs)``.
Every name is loaded when it is first used.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from firstarc.determination.elements import Elements
    from firstarc.determination.state import State
    from firstarc.errors import FirstArcError, InputError, Problem, UsageError
    from firstarc.observing.load import load
    from firstarc.observing.observations import Observation, Observations
    from firstarc.observing.stations import Site
    from firstarc.observing.what_if import WhatIf
    from firstarc.pipeline import fit, gibbs, preliminary
    from firstarc.preliminary.batch import solve_triples
    from firstarc.results import Status
    from firstarc.widgets.desk import Desk

    __version__: str

#: Public name to the module that holds it; an empty text stands for a callable package of that name.
_HOME = {
    "load": "firstarc.observing.load",
    "Observations": "firstarc.observing.observations",
    "Observation": "firstarc.observing.observations",
    "WhatIf": "firstarc.observing.what_if",
    "Site": "firstarc.observing.stations",
    "preliminary": "",
    "gibbs": "firstarc.pipeline",
    "fit": "",
    "solve_triples": "firstarc.preliminary.batch",
    "State": "firstarc.determination.state",
    "Elements": "firstarc.determination.elements",
    "Desk": "firstarc.widgets.desk",
    "Status": "firstarc.results",
    "FirstArcError": "firstarc.errors",
    "UsageError": "firstarc.errors",
    "InputError": "firstarc.errors",
    "Problem": "firstarc.errors",
}

__all__ = [  # noqa: RUF022 - in the order of the work
    "load",
    "Observations",
    "Observation",
    "WhatIf",
    "Site",
    "preliminary",
    "gibbs",
    "fit",
    "solve_triples",
    "State",
    "Elements",
    "Desk",
    "Status",
    "FirstArcError",
    "UsageError",
    "InputError",
    "Problem",
    "__version__",
]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import PackageNotFoundError, version

        try:
            value: Any = version("firstarc")
        except PackageNotFoundError:  # the tree is used without being installed
            value = "0+unknown"
    elif name in _HOME:
        home = _HOME[name]
        value = getattr(import_module(home), name) if home else import_module(f"{__name__}.{name}")
    else:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(set(__all__) | set(globals()))
