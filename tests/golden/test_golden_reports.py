"""What results print, against the texts kept in this folder.

After a change that is meant, write them anew and read the difference before committing it::

    FIRSTARC_RENEW_GOLDEN=1 pytest tests/golden
    git diff tests/golden
"""

from __future__ import annotations

import html
import os
import re
from functools import cache
from pathlib import Path
from typing import Any

import pytest
from astropy.time import Time

import firstarc as fa
from pipeline.shared_cases import invented, loaded

HERE = Path(__file__).resolve().parent
RENEW = bool(os.environ.get("FIRSTARC_RENEW_GOLDEN"))


#: Invented states of few digits: all that is printed of them is the same on every machine.
EPOCH = Time("2026-04-17T21:23:27.300", scale="utc")
SATELLITE = fa.State([-9876.5, 18765.25, 7654.125], [-3.25, -1.5, 0.625], EPOCH, "earth")
HYPERBOLIC = fa.State([7000.0, -1200.0, 3400.0], [1.125, 10.875, 4.25], EPOCH, "earth")
MINOR_PLANET = fa.State([-1.125e8, -1.25e8, -5.5e7], [20.125, -23.75, -5.0625], EPOCH, "sun")


@cache
def reports() -> dict[str, Any]:
    """Name of the file to something that is shown."""
    obs, sun = invented("SATELLITE"), invented("MINOR_PLANET")
    pre = fa.preliminary(obs, pick=(2, 4, 7))
    about_sun = fa.preliminary(sun, pick=(0, 4, 8))
    two_nights = invented("SLOW_CLOCK")[:14]
    nearby = fa.preliminary(two_nights)
    return {
        "observations_satellite": obs,
        "observations_minor_planet": sun,
        "observations_what_if": obs.with_what_if(fa.WhatIf(clock_s=0.35, station="BRN")),
        "observation": obs[0],
        "preliminary_satellite": pre,
        "preliminary_minor_planet": about_sun,
        "preliminary_two_candidates": fa.preliminary(loaded("sh-molniya-90min", "s1"), pick=(0, 3, 6)),
        "preliminary_rejected": fa.preliminary(loaded("sh-geo-2nights", "n0"), pick=(0, 3, 5)),
        "candidate_satellite": pre.best,
        "candidate_minor_planet": about_sun.best,
        "stage_gauss": pre.best.gauss,
        "stage_gibbs": pre.best.gibbs,
        "fit_satellite": fa.fit(two_nights, start=nearby),
        "fit_estimates": fa.fit(two_nights, start=nearby, estimate=["clock:QLN"]),
        "fit_minor_planet": fa.fit(sun, start=about_sun),
        "fit_by_hand": fa.fit(obs, start=pre, forces="two-body", keep=[0], leave_out=[3]),
        "fit_undetermined": fa.fit(sun[:6], start=about_sun.best, forces="two-body"),
        "state_satellite": SATELLITE,
        "state_minor_planet": MINOR_PLANET,
        "state_hyperbolic": HYPERBOLIC,
        "elements_satellite": SATELLITE.elements,
        "elements_minor_planet": MINOR_PLANET.elements,
        "elements_hyperbolic": HYPERBOLIC.elements,
    }


def desks() -> dict[str, fa.Desk]:
    what_if = fa.Desk(invented("SATELLITE"), pick=(2, 4, 7))
    what_if.what_if = (fa.WhatIf(clock_s=0.35, station="BRN"),)
    return {
        "desk_satellite": fa.Desk(invented("SATELLITE"), pick=(2, 4, 7)),
        "desk_minor_planet": fa.Desk(invented("MINOR_PLANET"), pick=(0, 4, 8)),
        "desk_what_if": what_if,
        "desk_rejected": fa.Desk(loaded("sh-geo-2nights", "n0"), pick=(0, 3, 5)),
    }


def portable(text: str) -> str:
    """Paths differ from machine to machine; the name of the file stays."""
    return re.sub(r"(?:[A-Za-z]:)?[\\/](?:[\w.~ -]+[\\/])+(?=[\w.-]+\.(?:csv|psv)\b)", "…/", text)


def compare(name: str, text: str) -> None:
    path = HERE / f"{name}.txt"
    found = portable(text).rstrip() + "\n"
    if RENEW:
        path.write_text(found, encoding="utf-8", newline="\n")
        pytest.skip(f"{path.name} written anew")
    assert path.is_file(), f"{path.name} is missing; see the head of this file"
    assert found == path.read_text(encoding="utf-8")


@pytest.mark.parametrize("name", list(reports()))
def test_text(name: str) -> None:
    compare(name, repr(reports()[name]))


@pytest.mark.parametrize("name", ["desk_satellite", "desk_minor_planet", "desk_what_if", "desk_rejected"])
def test_text_of_the_desk(name: str) -> None:
    compare(name, desks()[name]._repr_mimebundle_()[0]["text/plain"])


def words_of(shown: str) -> list[str]:
    return html.unescape(re.sub(r"<[^>]*>", " ", shown)).split()


@pytest.mark.parametrize("name", list(reports()))
def test_html_has_the_same_words(name: str) -> None:
    one = reports()[name]
    kept = (HERE / f"{name}.txt").read_text(encoding="utf-8").split()
    assert words_of(portable(html.unescape(re.sub(r"<[^>]*>", " ", one._repr_html_())))) == kept


@pytest.mark.parametrize("name", ["desk_satellite", "desk_minor_planet", "desk_what_if", "desk_rejected"])
def test_html_of_the_desk_has_the_numbers(name: str) -> None:
    """Every word of the text with a digit in it stands in the kept picture too."""
    data = desks()[name]._repr_mimebundle_()[0]
    seen = html.unescape(re.sub(r"<[^>]*>", "", data["text/html"].split("</style>")[1]))
    words = [word.strip("(),;:.") for word in portable(data["text/plain"]).split() if re.search(r"\d", word)]
    missing = [word for word in words if word not in seen and word not in portable(seen)]
    assert not missing


def test_no_kept_text_is_left_over() -> None:
    assert {path.stem for path in HERE.glob("*.txt")} == set(reports()) | set(desks())
