"""Which forces an arc needs: every term is sized, what stays far below the noise is left out, in words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from firstarc.constants import ARCSEC_RAD, EARTH_RADIUS_KM, EARTH_ZONALS
from firstarc.dynamics.accelerations import Forces, dot
from firstarc.dynamics.force_models import (
    CENTERS,
    Drag,
    ForceModel,
    RadiationPressure,
    Track,
    full,
    two_body,
)
from firstarc.errors import UsageError
from firstarc.twobody.kepler import Array, propagate

#: Share of the smallest sigma by which everything left out together may move the object.
SHARE = 0.1
#: Times at which the terms are sized.
_SAMPLES = 240
#: Assumed where nothing is known, to say what might be missing (common practice for satellites), m2/kg.
_TYPICAL_LIGHT = 0.013
_TYPICAL_BALLISTIC = 0.022


class _Arc:
    """Two-body orbit over the arc, and what a perturbation of it amounts to."""

    def __init__(self, t_s: Array, r: Array, v: Array, gm: float, distance_km: float):
        self.t_s, self.r, self.v = t_s, r, v
        self.along = v / np.sqrt(dot(v, v))[:, None]
        self.rate = float(np.sqrt(gm / np.min(dot(r, r)) ** 1.5))
        self.half_s = 0.5 * float(t_s[-1] - t_s[0])
        self.distance_km = distance_km

    def arcsec(self, model: ForceModel) -> float:
        """Angle by which the perturbing forces of a model move the object at most."""
        pull = Forces(model, self.t_s).acceleration(self.r, self.v)
        largest = float(np.sqrt(np.max(dot(pull, pull))))
        steady = abs(float(np.mean(dot(pull, self.along))))
        square = self.half_s**2
        turned = 4.0 + self.rate * self.half_s
        moved = min(0.5 * largest * square, 1.5 * steady * square + largest * turned / self.rate**2)
        return moved / self.distance_km / ARCSEC_RAD


def _terms(model: ForceModel) -> dict[str, ForceModel]:
    """The model's conservative terms one by one."""
    bare = replace(model, zonals=(), bodies=(), relativity=False, radiation=None, drag=None)
    out: dict[str, ForceModel] = {}
    earth_body = tuple(b for b in model.bodies if b.name == "earth")
    if model.center == "earth":
        for k in range(len(model.zonals)):
            out[f"J{k + 2}"] = replace(bare, zonals=(*(0.0,) * k, model.zonals[k]))
    for body in model.bodies:
        out[body.name.capitalize()] = replace(bare, bodies=(body,))
    if model.relativity:
        out["relativity"] = replace(bare, relativity=True)
    if model.center == "sun" and model.zonals and earth_body:
        # The Earth's zonals on their own: its attraction with them less without.
        massless = tuple(replace(b, gm_km3_s2=0.0) for b in earth_body)
        out["Earth zonals"] = replace(bare, zonals=model.zonals, bodies=massless)
    return out


def decide(
    center: str,
    state: ArrayLike,
    t_state_s: float,
    span_s: tuple[float, float],
    sigma_rad: float,
    tracks: Mapping[str, Track] | None = None,
    *,
    pole: tuple[float, float, float] = (0.0, 0.0, 1.0),
    source: str = "",
    radiation: RadiationPressure | None = None,
    drag: Drag | None = None,
    itself: str = "",
) -> ForceModel:
    """Forces that an arc needs, with the reason.

    A term of largest acceleration a along the two-body orbit moves the object by about a h^2 / 2, h half the arc, as
    long as that is short against the orbit's own time 1/n. Later a mean acceleration b along the track grows to
    3 b h^2 / 2 (Gauss's equation for the mean motion), all else to some (4 + n h) a / n^2: oscillation and turning of
    node and periapsis. Over the distance to the observer this is an angle. The smallest terms are left out as
    long as their angles add up to less than :data:`SHARE` of the sigma. Much of such a shift is taken up by the
    fitted state, so the estimate errs on the safe side.

    Parameters
    ----------
    center : str
        ``"earth"`` or ``"sun"``.
    state : array_like, shape (6,)
        Approximate orbit, km and km/s, ICRF axes.
    t_state_s : float
    span_s : tuple of float
        First and last time of the arc.
    sigma_rad : float
        Smallest sigma of the observations.
    tracks : mapping of str to callable, optional
        Bodies from the centre, as for :func:`firstarc.dynamics.force_models.full`. Without them no third body can
        be considered, and the reason says so.
    pole, source, itself
        As for :func:`firstarc.dynamics.force_models.full`.
    radiation, drag
        Kept when given.

    Returns
    -------
    ForceModel
        Its ``reason`` says what moves the object by how much.

    Raises
    ------
    UsageError
        An unknown centre, or numbers that are not finite.
    """
    if center not in CENTERS:
        raise UsageError(f"center={center!r}; expected 'earth' or 'sun'")
    y = np.asarray(state, dtype=float)
    if y.shape != (6,) or not np.all(np.isfinite(y)):
        raise UsageError(f"state is {y}; expected six finite numbers: km and km/s")
    if not (np.isfinite(sigma_rad) and sigma_rad > 0.0):
        raise UsageError(f"sigma_rad={sigma_rad!r}; expected a positive number of radians")
    begin, end = float(min(span_s)), float(max(span_s))
    model = _everything(center, tracks, pole, source, radiation, drag, itself)
    t = np.linspace(begin, end, _SAMPLES)
    r, v = propagate(y[:3], y[3:], t - t_state_s, model.gm_km3_s2)
    radius = np.sqrt(np.sum(r * r, axis=1))
    if center == "earth":
        # Seen from the ground below: the worst place.
        distance = float(np.maximum(radius - EARTH_RADIUS_KM, 100.0).min())
    elif tracks is not None:
        line = r - np.asarray(tracks["earth"](t), dtype=float)
        distance = float(max(np.sqrt(np.sum(line * line, axis=1).min()), EARTH_RADIUS_KM))
    else:
        distance = float(radius.min())
    arc = _Arc(t, r, v, model.gm_km3_s2, distance)
    sizes = {name: arc.arcsec(part) for name, part in _terms(model).items()}
    sigma = sigma_rad / ARCSEC_RAD
    dropped: list[str] = []
    left_out = 0.0
    for name in sorted(sizes, key=sizes.__getitem__):
        if left_out + sizes[name] > SHARE * sigma:
            break
        left_out += sizes[name]
        dropped.append(name)
    kept = [name for name in sizes if name not in dropped]
    chosen = replace(_only(model, kept), reason=_reason(sizes, kept, left_out, sigma, end - begin, model))
    remarks = _missing(model, tracks, arc, sigma)
    return replace(chosen, reason=" ".join([chosen.reason, *remarks]))


def _everything(
    center: str,
    tracks: Mapping[str, Track] | None,
    pole: tuple[float, float, float],
    source: str,
    radiation: RadiationPressure | None,
    drag: Drag | None,
    itself: str,
) -> ForceModel:
    if tracks is not None:
        return full(center, tracks, pole, source, radiation, drag, itself)
    if center == "earth":
        return replace(two_body(center), zonals=EARTH_ZONALS, radiation=radiation, drag=drag, pole=pole)
    return replace(two_body(center), relativity=True, radiation=radiation, drag=drag, pole=pole)


def _only(model: ForceModel, kept: list[str]) -> ForceModel:
    """The model with the terms that were kept; zonals up to the last one needed."""
    if model.center == "earth":
        last = max((k + 1 for k in range(len(model.zonals)) if f"J{k + 2}" in kept), default=0)
        zonals = model.zonals[:last]
    else:
        zonals = model.zonals if "Earth zonals" in kept else ()
    needed = {"earth"} if model.center == "sun" and zonals else set()
    if model.radiation is not None and model.center == "earth":
        needed.add("sun")
    bodies = tuple(b for b in model.bodies if b.name.capitalize() in kept or b.name in needed)
    return replace(model, zonals=zonals, bodies=bodies, relativity="relativity" in kept)


def _angle(arcsec: float) -> str:
    """An angle with the two digits that the estimate is worth."""
    if arcsec >= 36000.0:
        return f"{arcsec / 3600.0:.0f} deg" if arcsec < 90.0 * 3600.0 else "more than 90 deg"
    if arcsec >= 3600.0:
        return f"{arcsec / 3600.0:.1f} deg"
    return f"{arcsec:.2g} arcsec" if arcsec < 100.0 else f"{float(f'{arcsec:.2g}'):.0f} arcsec"


def _length(seconds: float) -> str:
    for unit, size in (("d", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 2.0 * size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds:.3g} s"


def _reason(
    sizes: dict[str, float], kept: list[str], left_out: float, sigma: float, arc_s: float, model: ForceModel
) -> str:
    arc = _length(arc_s)
    against = f"(smallest sigma {_angle(sigma)})"
    if not kept:
        extra = [] if model.radiation is None else ["radiation pressure"]
        extra += [] if model.drag is None else ["drag"]
        head = "Two-body is enough" if not extra else f"Two-body and the {' and '.join(extra)} asked for are enough"
        return (
            f"{head}: the neglected terms move the object by less than {_angle(left_out)} over the arc of "
            f"{arc} {against}."
        )
    listed = ", ".join(f"{name} {_angle(sizes[name])}" for name in sorted(kept, key=sizes.__getitem__)[::-1])
    text = f"Kept for the arc of {arc}, with how far each moves the object at most: {listed} {against}."
    out = [name for name in sizes if name not in kept]
    if out:
        text += f" Left out, together less than {_angle(left_out)}: {', '.join(out)}."
    return text


def _missing(model: ForceModel, tracks: Mapping[str, Track] | None, arc: _Arc, sigma: float) -> list[str]:
    """What could matter and is not there."""
    remarks = []
    center = model.center
    if tracks is None:
        what = "the Sun and the Moon" if center == "earth" else "the planets"
        remarks.append(f"No ephemeris was given: {what} were not considered.")
    bare = replace(model, zonals=(), bodies=(), relativity=False, radiation=None, drag=None)
    if center == "earth" and model.radiation is None and tracks is not None:
        sun = tuple(b for b in model.bodies if b.name == "sun")
        # The Sun's attraction is taken out again by a mass of zero.
        light = replace(
            bare,
            bodies=tuple(replace(b, gm_km3_s2=0.0) for b in sun),
            radiation=RadiationPressure(_TYPICAL_LIGHT, shadow=None),
        )
        size = arc.arcsec(light)
        if size > SHARE * sigma:
            remarks.append(
                f"Radiation pressure is not included: {_TYPICAL_LIGHT:g} m2/kg would move it by up to "
                f"{_angle(size)}; give or estimate area-to-mass."
            )
    if center == "earth" and model.drag is None:
        size = arc.arcsec(replace(bare, drag=Drag(_TYPICAL_BALLISTIC)))
        if size > SHARE * sigma:
            remarks.append(
                f"Drag is not included: {_TYPICAL_BALLISTIC:g} m2/kg would move it by up to {_angle(size)}; "
                f"give or estimate the ballistic coefficient."
            )
    return remarks
