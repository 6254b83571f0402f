"""The margin of a check on the one log scale that all checks share, with the limit in one place."""

from __future__ import annotations

import math
from typing import Any

Item = tuple[Any, ...]

WIDTH, HEIGHT = 150.0, 18.0
_LEFT, _RIGHT, _MIDDLE = 6.0, 144.0, 9.0
#: Place of the limit, and px per factor of ten.
LIMIT_X, PX_PER_DECADE = 36.7, 25.55


def margin_bar(margin: float | None) -> dict[str, Any]:
    """Draw how far a check is from its limit.

    Parameters
    ----------
    margin : float or None
        Factor by which the check holds: 1 at the limit, above it holds (filled circle), below it fails (open
        diamond). Values beyond the scale end in an arrowhead. None where there is nothing to test.

    Returns
    -------
    dict
        A flat figure of 150 x 18 px; it needs no frame.
    """
    items: list[Item] = [
        ("seg", "ax0", _LEFT, _MIDDLE, _RIGHT, _MIDDLE),
        ("seg", "lim", LIMIT_X, 2.0, LIMIT_X, 16.0),
    ]
    figure = {"width": WIDTH, "height": HEIGHT, "label": "no test", "caption": "", "note": "", "items": items}
    if margin is None or math.isnan(margin):
        return figure
    figure["label"] = f"{_factor(margin)} times the limit: {'holds' if margin >= 1.0 else 'fails'}"
    raw = LIMIT_X + PX_PER_DECADE * math.log10(margin) if margin > 0 else -math.inf
    raw = raw if margin != math.inf else math.inf
    x = round(min(max(raw, _LEFT), _RIGHT), 1)
    holds = margin >= 1.0
    items.append(("seg", "mg" if holds else "mg bad", LIMIT_X, _MIDDLE, x, _MIDDLE))
    if raw > _RIGHT + 1.0:
        items += [
            ("seg", "mg", x - 5.0, _MIDDLE - 4.0, x, _MIDDLE),
            ("seg", "mg", x - 5.0, _MIDDLE + 4.0, x, _MIDDLE),
        ]
        x -= 10.0
    elif raw < _LEFT - 1.0:
        ends = ((x, _MIDDLE - 4.0), (x, _MIDDLE), (x, _MIDDLE + 4.0))
        items += [("seg", "mg bad", x - 4.0, _MIDDLE, *end) for end in ends]
        x += 8.0
    if holds:
        items.append(("mark", "mk now u", "circle", x, _MIDDLE, 4, ""))
    else:
        items.append(("mark", "mk dev h", "diamond", x, _MIDDLE, 5, ""))
    return figure


def _factor(margin: float) -> str:
    if margin == math.inf:
        return "infinitely many"
    return f"{margin:.0f}" if margin >= 99.5 else f"{margin:.2g}"
