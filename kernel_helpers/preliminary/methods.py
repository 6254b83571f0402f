"""The methods of preliminary determination under their names, called in one way."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

from firstarc.preliminary.assumed_eccentricity import solve as assumed_eccentricity
from firstarc.preliminary.circular import solve as circular
from firstarc.preliminary.double_r import solve as double_r
from firstarc.preliminary.four_observations import solve as four_observations
from firstarc.preliminary.laplace import solve as laplace
from firstarc.preliminary.measured import solve as measured
from firstarc.preliminary.method_orbit import MethodOrbit
from firstarc.preliminary.ranging import solve as ranging
from firstarc.preliminary.two_ranges import solve as two_ranges

Solver = Callable[..., tuple[MethodOrbit, ...]]


class Method(NamedTuple):
    """What a method needs.

    ``label`` is its name for people, ``fewest`` the observations it needs; ``takes`` says which it is given: the
    three of the ``"pick"``, ``"all"``, or those of the pick with measured ``"ranges"``. ``solve`` is None for Gauss'
    method, which has stages of its own (:mod:`firstarc.preliminary.candidates`), and for the automatic choice.
    """

    label: str
    fewest: int
    takes: str
    solve: Solver | None


METHODS: dict[str, Method] = {
    "auto": Method("automatic", 3, "pick", None),
    "gauss": Method("Gauss", 3, "pick", None),
    "laplace": Method("Laplace", 3, "pick", laplace),
    "double-r": Method("double-r", 3, "pick", double_r),
    "two-ranges": Method("two ranges", 3, "pick", two_ranges),
    "four-observations": Method("four observations", 4, "all", four_observations),
    "circular": Method("circular orbit", 2, "pick", circular),
    "assumed-eccentricity": Method("assumed eccentricity", 2, "all", assumed_eccentricity),
    "ranging": Method("ranging", 2, "all", ranging),
    "measured-ranges": Method("measured ranges", 2, "ranges", measured),
}
