"""An invented determination as the Desk would show it: an Earth satellite, nine observations, two stations.

Stations, object and observations are invented; the numbers belong together (orbit, directions and residuals
were computed together), but they serve as a sample for drawing, not as check values.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from firstarc.widgets.figures import (
    FrameWriter,
    Root,
    RowMark,
    SpaceOrbit,
    SpaceRow,
    Track,
    convergence,
    margin_bar,
    orbit_space,
    residuals,
    root_function,
    sky_track,
)

MINUS = "\u2212"
EARTH_RADIUS_KM = 6378.137

#: time of day, station, right ascension, declination, O−C in arcsec, sigma in arcsec, in or out
OBSERVATIONS = (
    ("20:52:12.41", "BRN", "08 45 53.98", "+10 25 49.3", -0.18, 1.14, 1.0, True),
    ("20:58:03.77", "BRN", "09 13 20.01", "+10 16 53.5", 0.70, -0.61, 1.0, True),
    ("21:06:41.20", "BRN", "09 45 21.22", "+09 43 44.2", -0.95, -0.42, 1.0, True),
    ("21:14:09.95", "BRN", "10 07 22.28", "+09 05 54.3", -0.07, 0.24, 1.0, True),
    ("21:23:27.30", "BRN", "10 29 34.16", "+08 14 35.9", 0.14, -1.36, 1.0, True),
    ("21:31:18.64", "QLN", "10 54 15.18", "+11 30 23.0", 1.62, 0.17, 1.5, True),
    ("21:40:50.12", "QLN", "11 09 48.20", "+10 16 08.4", -3.83, 10.68, 1.5, False),
    ("21:51:33.48", "QLN", "11 24 33.14", "+08 59 13.3", -1.27, 1.49, 1.5, True),
    ("22:03:05.06", "QLN", "11 38 02.24", "+07 43 37.0", 0.51, 0.73, 1.5, True),
)
PICK = (2, 4, 7)
SHAPES = {"BRN": "circle", "QLN": "triangle"}


def _sixties(text: str) -> float:
    a, b, c = text.lstrip("+-").replace(":", " ").split()
    return (-1.0 if text.startswith("-") else 1.0) * (float(a) + float(b) / 60 + float(c) / 3600)


def kepler_positions(a: float, e: float, i: float, node: float, argp: float, anomaly_deg: np.ndarray) -> np.ndarray:
    """Positions (m, 3) on an ellipse at eccentric anomalies; angles in degrees."""
    i, node, argp = np.radians([i, node, argp])
    big_e = np.radians(anomaly_deg)
    p = np.array(
        [
            np.cos(node) * np.cos(argp) - np.sin(node) * np.sin(argp) * np.cos(i),
            np.sin(node) * np.cos(argp) + np.cos(node) * np.sin(argp) * np.cos(i),
            np.sin(argp) * np.sin(i),
        ]
    )
    q = np.array(
        [
            -np.cos(node) * np.sin(argp) - np.sin(node) * np.cos(argp) * np.cos(i),
            -np.sin(node) * np.sin(argp) + np.cos(node) * np.cos(argp) * np.cos(i),
            np.cos(argp) * np.sin(i),
        ]
    )
    x, y = a * (np.cos(big_e) - e), a * np.sqrt(1 - e * e) * np.sin(big_e)
    return x[:, None] * p + y[:, None] * q


def eccentric_anomaly_deg(mean_deg: np.ndarray, e: float) -> np.ndarray:
    mean = np.radians(mean_deg)
    big_e = mean + e * np.sin(mean)
    for _ in range(50):
        big_e = big_e - (big_e - e * np.sin(big_e) - mean) / (1 - e * np.cos(big_e))
    return np.degrees(big_e)


class Sample:
    """Plain arrays of the invented determination."""

    def __init__(self) -> None:
        n = len(OBSERVATIONS)
        self.t_s = np.array([3600.0 * _sixties(row[0]) for row in OBSERVATIONS]) - 3600.0 * _sixties("21:23:27.30")
        self.ra_dec_deg = np.array([[15.0 * _sixties(row[2]), _sixties(row[3])] for row in OBSERVATIONS])
        self.oc = np.array([row[4:6] for row in OBSERVATIONS], dtype=float)
        self.sigma = np.array([[row[6]] * 2 for row in OBSERVATIONS], dtype=float)
        self.rows = [
            RowMark(
                k + 1,
                float(self.t_s[k]),
                row[1],
                SHAPES[row[1]],
                row[7],
                PICK.index(k) + 1 if k in PICK else 0,
                k == 4,
            )
            for k, row in enumerate(OBSERVATIONS)
        ]
        self.recorded_oc = self.oc + np.linspace(-1.2, 1.5, n)[:, None]
        self.elements = (24518.0, 0.69999, 24.6006, 22.2991, 4.697)

    def position_km(self, t_s: np.ndarray) -> np.ndarray:
        mean = 45.62 + 360.0 / (636.8 * 60.0) * np.asarray(t_s)
        return kepler_positions(*self.elements, eccentric_anomaly_deg(mean, self.elements[1]))

    def tracks(self, shift_deg: float = 0.0) -> list[Track]:
        """A smooth curve through each station's directions, run on a little at both ends."""
        out = []
        for station, shape in SHAPES.items():
            own = [k for k, row in enumerate(OBSERVATIONS) if row[1] == station and row[7]]
            t = self.t_s[own]
            fine = np.linspace(t[0] - 300.0, t[-1] + 300.0, 81)
            degree = min(3, len(own) - 1)
            ra, dec = (np.polyval(np.polyfit(t, self.ra_dec_deg[own, c], degree), fine) for c in (0, 1))
            first, last = np.searchsorted(fine, [t[0], t[-1]])
            out.append(Track(station, shape, ra, dec + shift_deg, int(first), int(last)))
        return out

    def orbit(self, letter: str = "A") -> SpaceOrbit:
        e = np.linspace(0.0, 360.0, 181)
        at_node = [
            np.degrees(2 * np.arctan(np.sqrt((1 - 0.69999) / 1.69999) * np.tan(np.radians(nu / 2))))
            for nu in (-4.697, 175.303)
        ]
        asc, desc = kepler_positions(*self.elements, np.array(at_node))
        peri, apo = kepler_positions(*self.elements, np.array([0.0, 180.0]))
        seen = self.position_km(np.linspace(self.t_s[0], self.t_s[-1], 40))
        return SpaceOrbit(kepler_positions(*self.elements, e), seen, peri, apo, asc, desc, letter)

    def space_rows(self) -> list[SpaceRow]:
        positions = self.position_km(self.t_s)
        ra, dec = np.radians(self.ra_dec_deg.T)
        los = np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
        observers = []
        for r, direction in zip(positions, los, strict=True):
            # The observer stands where the line of sight leaves the Earth, or passes nearest to its centre.
            along = r @ direction
            inside = along**2 - r @ r + EARTH_RADIUS_KM**2
            observers.append(r - direction * (along - np.sqrt(max(inside, 0.0))))
        return [SpaceRow(mark, r, o) for mark, r, o in zip(self.rows, positions, observers, strict=True)]

    def root_values(self) -> tuple[np.ndarray, np.ndarray]:
        """A polynomial of degree eight with the three positive roots of the sample."""
        r = np.linspace(4000.0, 44000.0, 400)
        x = r / 20000.0
        roots = np.array([10327.0, 15121.0, 23138.0]) / 20000.0
        return r, np.prod([x - root for root in roots], axis=0) * (x**2 + 1.0) * (x + 0.8) * (x + 1.1) * (x + 1.7)

    def roots(self) -> list[Root]:
        return [Root("A", 23138.0, True, True), Root("B", 15121.0, False), Root("C", 10327.0, False)]


def _orbit_table(frame: FrameWriter) -> dict[str, Any]:
    def cell(text: str, agree: int = 0, step: str = "", dev: bool = False, in_sigma: str = "") -> dict[str, Any]:
        whole, _, fraction = text.partition(".")
        return {
            "whole": whole,
            "fraction": "." + fraction if fraction else "",
            "agree": agree,
            "step": step,
            "in_sigma": in_sigma,
            "dev": dev,
        }

    rows = (
        (
            "a",
            "a",
            "semi-major axis",
            "km",
            ("24\u2009707", "23\u2009222", "24\u2009471", "24\u2009468"),
            (2, 1, 5),
            "9",
        ),
        ("e", "e", "eccentricity", "", ("0.70759", "0.69561", "0.70004", "0.70001"), (3, 3, 6), "0.00003"),
        ("i_deg", "i", "inclination", "°", ("24.6153", "24.6153", "24.6105", "24.6101"), (4, 4, 6), "0.0013"),
        ("node_deg", "Ω", "node", "°", ("22.3530", "22.3530", "22.2896", "22.2893"), (2, 2, 6), "0.0014"),
        ("argp_deg", "ω", "argument of perigee", "°", ("4.575", "1.994", "4.609", "4.613"), (1, 0, 4), "0.016"),
        ("M_deg", "M", "mean anomaly", "°", ("44.47", "49.85", "45.73", "45.71"), (1, 1, 4), "0.02"),
    )
    table = [
        {
            "key": key,
            "symbol": [{"t": symbol, "em": 1}],
            "name": name,
            "unit": unit,
            "kind": "element",
            "cells": [*(cell(v, k) for v, k in zip(values, (*agree, 0), strict=True)), cell(sigma), cell("·")],
        }
        for key, symbol, name, unit, values, agree, sigma in rows
    ]
    miss = [cell("252.8"), cell("825.8"), cell("0.0"), cell(""), cell(""), cell("")]
    table.append({"key": "miss", "symbol": ["miss"], "name": "miss", "unit": "″", "kind": "miss", "cells": miss})
    steps = [
        ("Gauss estimate", 252.8),
        ("Gibbs correction", 825.8),
        ("step 1", 4.2),
        ("step 2", 1.7e-4),
        ("step 3", 9e-11),
    ]
    return {
        "note": "at 21:23:27.30 UTC, ICRF equator. Underlined digits agree with least squares.",
        "columns": [
            {"title": "Gauss estimate", "sub": "root A, row 5", "kind": "stage"},
            {"title": "Gibbs correction", "sub": "Gibbs chosen", "kind": "stage"},
            {"title": "Converged", "sub": "3 Newton steps", "kind": "stage"},
            {"title": "Least squares", "sub": "8 rows, perturbed", "kind": "fit"},
            {"title": "± σ", "sub": "", "kind": "sigma"},
            {"title": "Δ recorded", "sub": "no what-if", "kind": "recorded"},
        ],
        "rows": table,
        "none": "",
        "convergence": convergence(steps, 1.2, frame=frame),
    }


def build_scene(title: str = "0417-A", ghost: bool = False) -> tuple[dict[str, Any], bytes]:
    """A whole scene of the sample, and its frame."""
    sample, frame = Sample(), FrameWriter()
    rows = []
    for k, (time, station, ra, dec, dra, ddec, sigma, used) in enumerate(OBSERVATIONS):
        texts = [f"{value:+.1f}".replace("-", MINUS) for value in (dra, ddec)]
        chi = f"{max(abs(dra), abs(ddec)) / sigma:.1f}"
        texts, chi = (texts, chi) if used else ([f"({text})" for text in texts], f"({chi})")
        rows.append(
            {
                "row": k,
                "number": str(k + 1),
                "pick": sample.rows[k].pick,
                "used": used,
                "selected": k == 4,
                "time": time,
                "station": station,
                "shape": SHAPES[station],
                "ra": ra,
                "dec": dec,
                "oc_ra": texts[0],
                "oc_dec": texts[1],
                "chi": chi,
                "big": not used,
            }
        )
    ghosts = {"recorded_arcsec": sample.recorded_oc} if ghost else {}
    r, values = sample.root_values()
    checks = [
        ("Determined", "slant range at row 5 known to 0.009 %, limit 5 %", 553.0, "×553"),
        ("Lines not coplanar", "determinant 0.00992, σ 2.7·10⁻⁶, limit 10 σ", 364.0, "×364"),
        ("Gibbs better", "sides 8.7°, 10.5°: 1.7 m/s, Herrick–Gibbs 4.6; angle rule too", 2.7, "×2.7"),
        ("Positions coplanar", "0.000° by construction: a test only with measured positions", None, ""),
        (
            "Residuals above σ",
            "χ² 37.4 for 10 degrees of freedom, chance 0.00005, limit 0.01",
            0.005,
            "×0.005",
        ),
    ]
    scene: dict[str, Any] = {
        "seq": -1,
        "ok": True,
        "bad": False,
        "title": title,
        "subtitle": "invented",
        "headline": [
            [
                {"t": "Determined.", "b": 1},
                " Elliptic about the Earth: ",
                {"t": "a 24\u2009468 ± 9 km", "k": 1},
                ", ",
                {"t": "h", "em": 1},
                {"t": "p", "sub": 1},
                " 961 ± 2 km.",
            ],
            ["8 of 9 observations, rms 6.8″ of the rows beside the pick."],
            ["No what-if: these are the recorded observations."],
        ],
        "observations": {
            "caption": "Observations",
            "note": "2031-04-17 UTC, ICRF; O−C in ″, RA × cos Dec",
            "foot": "Pick 3·5·8: sides 8.7° and 10.5°, even, two stations.",
            "rows": rows,
        },
        "what_if": {
            "stations": [{"code": "BRN", "label": "BRN Brannoc"}],
            "station": "BRN",
            "any": False,
            "sliders": [],
            "estimate": {"asked": "", "text": "", "offsets": {}, "station": ""},
        },
        "candidates": {
            "note": "3 positive roots, 1 admissible",
            "methods": [{"key": "gauss", "label": "Gauss"}, {"key": "laplace", "label": "Laplace"}],
            "method": "gauss",
            "head": [["root"], ["r km"], ["slant ranges 3·5·8 km"], ["a km"], ["e"], ["rms others ″"]],
            "rows": [
                {
                    "letter": "A",
                    "admissible": True,
                    "chosen": True,
                    "root": "23\u2009138",
                    "reason": "",
                    "cells": ["14\u2009551 · 17\u2009673 · 21\u2009478", "24\u2009468", "0.700", "8.6"],
                },
                {
                    "letter": "B",
                    "admissible": False,
                    "chosen": False,
                    "root": "15\u2009121",
                    "cells": [],
                    "reason": "rejected: perigee 5\u2009353 km below the surface after convergence",
                },
            ],
        },
        "orbit": _orbit_table(frame),
        "checks": [
            {"verdict": v, "text": t, "fails": m is not None and m < 1, "margin": text, "bar": margin_bar(m)}
            for v, t, m, text in checks
        ],
        "figures": {
            "residuals": residuals(sample.rows, sample.oc, sample.sigma, frame=frame, width=480, **ghosts),
            "sky": sky_track(
                sample.rows,
                sample.ra_dec_deg,
                sample.oc,
                sample.tracks(),
                frame=frame,
                width=366,
                recorded_tracks=sample.tracks(0.05) if ghost else (),
                **ghosts,
            ),
            "root": root_function(
                r,
                values,
                sample.roots(),
                unit="km",
                frame=frame,
                width=230,
                body_radius=EARTH_RADIUS_KM,
                center_name="Earth's centre",
            ),
            "orbit": orbit_space(
                sample.orbit(),
                sample.space_rows(),
                center="earth",
                unit="km",
                body_radius=EARTH_RADIUS_KM,
                frame=frame,
                width=366,
            ),
        },
        "code": 'obs = fa.load("night.psv")\npre = fa.preliminary(obs, pick=(2, 4, 7))',
        "warnings": [],
        "settings": {
            "seq": -1,
            "pick": list(PICK),
            "excluded": [6],
            "kept": [],
            "estimate": "",
            "station": "BRN",
            "offsets": {},
            "row_clock": {},
            "row": 4,
            "candidate": "A",
            "method": "gauss",
            "held": False,
            "widths": {"residuals": 480, "sky": 366, "orbit": 366, "root": 230},
        },
    }
    return scene, frame.to_bytes()


@pytest.fixture(name="sample")
def sample_fixture() -> Sample:
    return Sample()


@pytest.fixture(name="build_scene")
def build_scene_fixture() -> Any:
    return build_scene
