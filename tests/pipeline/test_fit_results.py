"""The fit as a value: frozen, comparable, picklable, shown; its covariance in other axes and in elements."""

from __future__ import annotations

import dataclasses
import html
import pickle
import re
from functools import cache

import numpy as np
import pytest

import firstarc as fa
from pipeline.fit_scenes import with_error
from pipeline.shared_cases import directions_of, frame_of, invented, loaded, noisy, truth, with_directions

LEO, COMET = "sh-leo-pass", "sh-comet-parabolic"


@cache
def fits() -> dict[str, fa.Observations]:
    undetermined = invented("MINOR_PLANET")[:3]
    return {
        "earth": fa.fit(with_error(loaded(LEO, "s1"), 2, (12.0, 0.0))),
        "sun": fa.fit(loaded(COMET, "s1"), forces="two-body"),
        "undetermined": fa.fit(undetermined),
        "estimates": fa.fit(invented("SATELLITE"), forces="two-body", estimate=["clock:QLN"]),
    }


NAMES = ("earth", "sun", "undetermined", "estimates")


@pytest.mark.parametrize("name", NAMES)
def test_frozen(name: str) -> None:
    fit = fits()[name]
    with pytest.raises(dataclasses.FrozenInstanceError):
        fit.chi2 = 0.0
    for array in (fit.covariance, fit.used, fit.residuals_arcsec, fit.chi, fit.state.r_km):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1
    with pytest.raises(TypeError):
        hash(fit)


@pytest.mark.parametrize("name", NAMES)
def test_pickled_whole_and_compared_by_value(name: str) -> None:
    fit = fits()[name]
    again = pickle.loads(pickle.dumps(fit))
    assert again == fit and again is not fit
    assert repr(again) == repr(fit)
    assert again.residuals_of(again.observations)["chi"].shape == fit.chi.shape
    assert not again.covariance.flags.writeable
    assert fit != fits()["sun" if name == "earth" else "earth"]
    assert fit != "a fit"


def test_the_same_fit_twice_has_the_same_digits() -> None:
    assert fa.fit(loaded(COMET, "s1"), forces="two-body") == fits()["sun"]
    assert fa.fit(loaded(COMET, "s1"), forces="two-body", leave_out=[0]) != fits()["sun"]


@pytest.mark.parametrize("name", NAMES)
def test_text_and_html_have_the_same_words(name: str) -> None:
    fit = fits()[name]
    shown = fit._repr_html_()
    assert html.unescape(re.sub(r"<[^>]*>", " ", shown)).split() == repr(fit).split()
    assert repr(fit) == fit.report()
    centre = "Earth" if fit.center == "earth" else "Sun"
    verdict = "Determined." if fit.determined else "Not determined."
    assert fit.report().startswith(f"Least-squares orbit about the {centre}. {verdict}")
    # How many steps it took may differ by one between versions of the linear algebra: a converged fit says only so.
    ending = "Converged." if fit.status.ok else fit.status.sentence
    for words in (fit.forces, fit.forces_reason, fit.verdicts.sentence, ending):
        assert words in fit.report()


def test_nothing_of_an_undetermined_orbit_has_a_sigma() -> None:
    table = fits()["undetermined"].element_table()
    assert all(row[2] == "" for row in table[1:])
    determined = fits()["earth"].element_table()
    named = {row[0]: row for row in determined[1:]}
    assert named["a"][2] != "" and named["a"][3] == "km"
    # as many decimals as the sigma has, which has one or two digits
    for value, sigma in ((row[1], row[2]) for row in determined[1:] if row[2]):
        assert len(value.partition(".")[2]) == len(sigma.partition(".")[2])
        assert len(sigma.replace(".", "").lstrip("0").rstrip()) <= 2 or float(sigma.replace(" ", "")) >= 100.0


def test_text_from_the_file_is_escaped() -> None:
    """Station codes reach the report by way of the estimates; names and codes are not to become markup."""
    frame = frame_of(invented("SATELLITE"), name="<b>A</b>")
    frame["station"] = [f"<i>{code}&" for code in frame["station"]]
    obs = fa.load(frame)
    fit = fa.fit(obs, forces="two-body", estimate=["clock:<i>QLN&"])
    assert "clock of <i>QLN&" in fit.report()
    shown = fit._repr_html_()
    assert "<i>" not in shown and "<b>A" not in shown
    assert "clock of &lt;i&gt;QLN&amp;" in shown


@pytest.mark.parametrize("name", ["earth", "sun", "estimates"])
def test_covariance_on_radial_transverse_and_normal_axes(name: str) -> None:
    fit = fits()[name]
    turned = fit.covariance_rtn
    size = np.sqrt(np.diag(turned))
    correlation = turned / np.outer(size, size)
    np.testing.assert_allclose(correlation, correlation.T, atol=1e-12)
    assert np.linalg.eigvalsh(0.5 * (correlation + correlation.T)).min() > 0.0
    for block in (slice(0, 3), slice(3, 6)):
        np.testing.assert_allclose(np.trace(turned[block, block]), np.trace(fit.covariance[block, block]), rtol=1e-9)
    # the variance along each axis, by hand
    r, v = fit.state.r_km, fit.state.v_km_s
    axes = [r / np.linalg.norm(r), None, np.cross(r, v) / np.linalg.norm(np.cross(r, v))]
    axes[1] = np.cross(axes[2], axes[0])
    assert axes[1] @ v > 0.0
    for k, axis in enumerate(axes):
        np.testing.assert_allclose(turned[k, k], axis @ fit.covariance[:3, :3] @ axis, rtol=1e-9)
        np.testing.assert_allclose(turned[k + 3, k + 3], axis @ fit.covariance[3:, 3:] @ axis, rtol=1e-9)


def test_residual_table() -> None:
    fit, obs = fits()["earth"], loaded(LEO, "s1")
    table = fit.residuals
    assert table.colnames == [
        "row", "dra_arcsec", "ddec_arcsec", "sigma_ra_arcsec", "sigma_dec_arcsec", "chi", "used", "reason",
    ]  # fmt: skip
    assert list(table["row"]) == list(range(1, len(obs) + 1))
    assert str(table["dra_arcsec"].unit) == str(table["ddec_arcsec"].unit) == "arcsec"
    assert "cos Dec" in table["dra_arcsec"].description
    inside = fit.residuals_arcsec[fit.used]
    np.testing.assert_allclose(fit.rms_arcsec, np.sqrt(np.mean(inside**2)), rtol=1e-12)
    np.testing.assert_allclose(fit.chi2, np.sum(fit.chi[fit.used] ** 2), rtol=1e-9)
    np.testing.assert_allclose(
        table["chi"], np.hypot(*(fit.residuals_arcsec / fit.sigma_arcsec).T), rtol=1e-9
    )  # no correlation stated
    assert fit.dof == 2 * int(fit.used.sum()) - 6


@pytest.mark.slow
@pytest.mark.parametrize("name", [LEO, COMET])
def test_element_sigmas_against_simulation(name: str) -> None:
    """200 repeats with new noise: scatter of the elements against their sigmas (11 % is 2.2 sigma of the scatter)."""
    obs, state = loaded(name, "s1"), truth(name)
    exact = directions_of(state, obs)
    sigma = np.ones((len(obs), 2))
    random = np.random.default_rng(200)
    stated = fa.fit(with_directions(obs, exact), start=state, forces="two-body").sigmas
    wanted = ("q_km", "e", "i_rad", "node_rad", "argp_rad")
    scatter = {key: [] for key in wanted}
    for _ in range(200):
        fit = fa.fit(with_directions(obs, noisy(exact, sigma, random)), start=state, forces="two-body")
        el = fit.elements
        for key, value in zip(
            wanted,
            (el.q_km, el.e, np.radians(el.i_deg), np.radians(el.node_deg), np.radians(el.argp_deg)),
            strict=True,
        ):
            scatter[key].append(value)
    for key in wanted:
        # nearly circular: neither the eccentricity's nor the periapsis' scatter is linear near a small e
        if name == LEO and key in ("e", "argp_rad"):
            continue
        ratio = np.std(scatter[key]) / getattr(stated, key)
        assert abs(ratio - 1.0) < 0.15, (key, ratio)
