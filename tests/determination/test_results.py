"""Every result is frozen, comparable, picklable, and says the same in text and in HTML."""

from __future__ import annotations

import copy
import html
import pickle
import re
from dataclasses import FrozenInstanceError, fields, replace
from functools import lru_cache
from typing import Any

import numpy as np
import pytest

import firstarc as fa
from pipeline.shared_cases import frame_of, invented, loaded


@lru_cache(maxsize=1)
def results() -> dict[str, Any]:
    pre = fa.preliminary(invented("SATELLITE"))
    sun = fa.preliminary(invented("MINOR_PLANET"))
    best = pre.best
    return {
        "Preliminary": pre,
        "Preliminary about the Sun": sun,
        "Candidate": best,
        "rejected Candidate": fa.preliminary(loaded("sh-molniya-90min", "s1")).candidates[-1],
        "Stage": best.gauss,
        "CorrectedStage": best.gibbs,
        "Iteration": best.history[0],
        "State": best.state,
        "Elements": best.elements,
        "Elements about the Sun": sun.best.elements,
        "gibbs": fa.gibbs(best.converged.positions_km),
        "Observations": invented("SATELLITE"),
        "Observation": invented("SATELLITE")[0],
    }


NAMES = list(results())


@pytest.mark.parametrize("name", NAMES)
def test_pickled_whole(name: str) -> None:
    one = results()[name]
    for protocol in range(2, pickle.HIGHEST_PROTOCOL + 1):
        assert pickle.loads(pickle.dumps(one, protocol)) == one
    assert copy.deepcopy(one) == one


@pytest.mark.parametrize("name", NAMES)
def test_frozen(name: str) -> None:
    one = results()[name]
    for field in fields(one):
        with pytest.raises(FrozenInstanceError):
            setattr(one, field.name, None)


def arrays(one: Any) -> list[tuple[str, np.ndarray]]:
    return [(f.name, v) for f in fields(one) if isinstance(v := getattr(one, f.name), np.ndarray)]


@pytest.mark.parametrize("name", [n for n in NAMES if "Observation" not in n])
def test_arrays_are_read_only(name: str) -> None:
    one = results()[name]
    for kept in (one, pickle.loads(pickle.dumps(one))):
        for field, array in arrays(kept):
            assert not array.flags.writeable, field
            if array.size:
                with pytest.raises(ValueError, match="read-only"):
                    array.flat[0] = 0


def test_the_callers_arrays_stay_the_callers() -> None:
    r, v = np.array([7000.0, 0.0, 0.0]), np.array([0.0, 7.5, 1.0])
    state = fa.State(r, v, (2461000.5, 0.0), "earth")
    r[0] = 1.0
    assert state.r_km[0] == 7000.0 and r.flags.writeable
    positions = np.array([[7000.0, 0, 0], [0, 7000.0, 0], [-7000.0, 100.0, 0]])
    stage = fa.gibbs(positions)
    positions[0, 0] = 1.0
    assert stage.positions_km[0, 0] == 7000.0


@pytest.mark.parametrize("name", [n for n in NAMES if "Observation" not in n])
def test_equality_sees_every_field(name: str) -> None:
    one = results()[name]
    assert one == copy.copy(one)
    assert (one != copy.copy(one)) is False
    assert one != "text" and one is not None
    changed = 0
    for field in fields(one):
        value = getattr(one, field.name)
        if isinstance(value, np.ndarray) and value.size and value.dtype.kind == "f" and np.isfinite(value).all():
            other = np.nextafter(value, np.inf)
        elif isinstance(value, float) and np.isfinite(value):
            other = float(np.nextafter(value, np.inf))
        elif isinstance(value, str):
            other = value + "x"
        elif isinstance(value, bool):
            other = not value
        else:
            continue
        twin = copy.copy(one)
        object.__setattr__(twin, field.name, other)
        assert twin != one, field.name
        changed += 1
    assert changed >= 2


def test_nan_equals_nan() -> None:
    rejected = results()["rejected Candidate"]
    assert not rejected.admissible and np.isnan(rejected.covariance).all() and np.isnan(rejected.sigma_range_km)
    assert rejected == pickle.loads(pickle.dumps(rejected))


def test_results_are_not_hashable() -> None:
    with pytest.raises(TypeError, match="unhashable"):
        hash(results()["State"])


def words_of_html(text: str) -> list[str]:
    without = re.sub(r"<[^>]*>", " ", text)
    return html.unescape(without).split()


@pytest.mark.parametrize("name", NAMES)
def test_text_and_html_have_the_same_words(name: str) -> None:
    one = results()[name]
    assert repr(one) == one.report()
    assert words_of_html(one._repr_html_()) == repr(one).split()
    assert "<script" not in one._repr_html_() and "nan" not in repr(one).lower().split()


HOSTILE = "<script>alert(\"x\")</script> & 'q' <img src=x onerror=alert(1)>"


def test_hostile_text_is_escaped() -> None:
    obs = fa.load(frame_of(invented(), name=HOSTILE), center="earth")
    shown = obs._repr_html_()
    assert "<script" not in shown and "<img" not in shown
    assert html.escape(HOSTILE) in shown
    assert HOSTILE in repr(obs)
    candidate = replace(results()["Candidate"], reason=HOSTILE)
    assert "<script" not in candidate._repr_html_() and "&lt;script&gt;" in candidate._repr_html_()
    pre = replace(results()["Preliminary"], pick_reason=HOSTILE)
    assert "<img" not in pre._repr_html_()


def test_status_is_true_or_false() -> None:
    best = results()["Candidate"]
    assert best.status.ok and bool(best.status) and best.status.sentence == str(best.status)
    assert best.status is best.converged.status
    assert not fa.Status(type(best.status.code).SINGULAR, "no").ok


def test_digits_follow_sigma() -> None:
    """The last column of a candidate's table: a value is written to the place of its sigma."""
    best = results()["Candidate"]
    for row in best.stage_table()[1:]:
        value, _, sigma = row[3].partition(" ± ")
        assert sigma, row
        places = len(value.partition(".")[2])
        assert places == len(sigma.partition(".")[2]), row
        assert len(sigma.replace(".", "").replace("\u202f", "").lstrip("0").rstrip("0") or "0") <= 2
        for stage in row[1:3]:
            assert len(stage.partition(".")[2]) == places, row
