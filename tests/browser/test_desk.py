"""The Desk in a real browser: what is on the screen is what Python computed, and hands move it."""

from __future__ import annotations

import re
from typing import Any

import pytest

pytestmark = pytest.mark.browser

STAGES = """
c = desk.best
def shown(stage, name):
    from firstarc.determination.stages import element_rows
    return element_rows(stage.elements)[name][0]
answer = {name: [shown(s, name) for s in (c.gauss, c.gibbs, c.converged)] for name in ("a", "e", "i", "node")}
"""


def number(text: str) -> float:
    return float(re.sub(r"[\u202f\u2009\s]", "", text).replace("\u2212", "-"))


def decimals(text: str) -> int:
    return len(text.partition(".")[2])


def shown_stages(desk: Any, name: str) -> list[str]:
    return [desk.locator(f'[data-fa="cell-{name}-{column}"] .n').first.inner_text() for column in range(3)]


def check_fit(notebook: Any) -> list[str]:
    """The least-squares column against the fit in Python, to the digit shown."""
    computed = notebook.python(
        "from firstarc.determination.stages import element_rows\n"
        "answer = {k: element_rows(desk.fit.elements)[k][0] for k in ('a', 'e', 'i', 'node')}"
    )
    texts = []
    for name, value in computed.items():
        text = notebook.desk(0).locator(f'[data-fa="cell-{name}-3"] .n').first.inner_text()
        step = 0.5 * 10.0 ** -decimals(text)
        if decimals(text) == 0:
            step *= 10.0 ** (len(text) - len(text.rstrip("0")))
        assert abs(number(text) - value) <= step * 1.0001, (name, text, value)
        texts.append(text)
    return texts


def check_stages(notebook: Any) -> dict[str, list[str]]:
    """Each of the three stages on the screen against Python, to the digit shown."""
    computed = notebook.python(STAGES)
    desk = notebook.desk(0)
    texts = {}
    for name, values in computed.items():
        texts[name] = shown_stages(desk, name)
        for text, value in zip(texts[name], values, strict=True):
            step = 0.5 * 10.0 ** -decimals(text)
            if decimals(text) == 0:
                # a coarse sigma rounds to tens or hundreds: trailing zeros may not be significant
                step *= 10.0 ** (len(text) - len(text.rstrip("0")))
            assert abs(number(text) - value) <= step * 1.0001, (name, text, value)
    return texts


def settle(notebook: Any) -> None:
    """Wait until the scene on the screen answers the newest settings."""
    notebook.page.wait_for_timeout(120)
    notebook.page.wait_for_function(
        """() => [...document.querySelectorAll(".fa[data-fa-seq]")].every((e) => e.dataset.faHeld === "false"
               && e.dataset.faSettled === "true" && !e.querySelector(".in.st"))"""
    )
    notebook.page.wait_for_timeout(60)


def drag(notebook: Any, key: str, pixels: float) -> None:
    slider = notebook.desk(0).locator(f'[data-fa="slider-{key}"]')
    slider.scroll_into_view_if_needed()
    box = slider.bounding_box()
    x, y = box["x"] + box["width"] / 2, box["y"] + box["height"] / 2
    mouse = notebook.page.mouse
    mouse.move(x, y)
    mouse.down()
    mouse.move(x + pixels, y, steps=20)
    mouse.up()
    settle(notebook)


def test_the_example_runs_and_a_dragged_clock_moves_all_three_stages(run_notebook):
    notebook = run_notebook("01_first_look.ipynb", desks=2)
    before = check_stages(notebook)
    recorded_fit = check_fit(notebook)
    assert "Determined" in notebook.desk(0).locator('[data-fa="headline"]').inner_text()
    assert notebook.python("answer = len(desk.what_if)") == 0

    drag(notebook, "clock_s", 30)
    clock = notebook.python("answer = desk.what_if[0].clock_s")
    assert clock > 0.0
    after = check_stages(notebook)
    assert check_fit(notebook) != recorded_fit
    assert after["node"][2] != before["node"][2]
    assert "What-if" in notebook.desk(0).locator('[data-fa="headline"]').inner_text()
    assert notebook.python("answer = desk.obs.what_if == ()") is True
    # the code that the Desk offers gives the same candidate
    same = "space['candidate'] == desk.best and space['fit'] == desk.fit"
    assert notebook.python(f"space = {{}}\nexec(desk.code(), space)\nanswer = {same}") is True

    notebook.desk(0).locator('[data-fa="reset-clock_s"]').click()
    settle(notebook)
    assert check_stages(notebook) == before
    assert notebook.python("answer = len(desk.what_if)") == 0


def test_pick_and_rows_are_changed_by_hand_and_from_python(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    desk = notebook.desk(0)
    desk.locator('[data-fa="pick-1"]').click()
    settle(notebook)
    pick = notebook.python("answer = list(desk.pick)")
    assert 1 in pick
    check_stages(notebook)
    desk.locator('[data-fa="in-3"]').click()
    settle(notebook)
    assert notebook.python("answer = list(desk.excluded)") == [3]
    assert notebook.python("answer = len(desk.preliminary.best.rows)") == 8
    assert notebook.python("desk.pick = (0, 3, 8)\nanswer = list(desk.excluded)") == []
    settle(notebook)
    check_stages(notebook)
    assert desk.locator('[data-fa="pick-3"]').inner_text() == "2"


def test_typed_offsets_widen_the_slider_and_a_failing_solve_is_said_in_words(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    desk = notebook.desk(0)
    box = desk.locator('[data-fa="box-lon_deg"]')
    box.fill("96.41773")
    box.press("Enter")
    settle(notebook)
    assert notebook.python("answer = round(desk.what_if[0].lon_deg, 5)") == 102.83546
    headline = desk.locator('[data-fa="headline"]').inner_text()
    assert "No preliminary orbit." in headline
    assert re.search(r"Row \d points \d+° below the horizon of BRN", headline), headline
    assert "Remedy" in headline
    # no stale number is left on the screen
    assert shown_stages(desk, "a") == ["\u2013"] * 3
    desk.locator('[data-fa="reset-all"]').click()
    settle(notebook)
    check_stages(notebook)


def test_the_clock_is_estimated_and_taken_over(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    desk = notebook.desk(0)
    desk.locator('[data-fa="estimate-clock"]').click()
    settle(notebook)
    words = desk.locator('[data-fa="estimate"]').inner_text()
    station = notebook.python("answer = desk.scene['settings']['station']")
    clock, sigma = notebook.python(
        f"e = __import__('firstarc').fit(desk.obs, start=desk.preliminary, estimate=['clock:{station}']).estimates[0]\n"
        "answer = [e.value, e.sigma]"
    )
    found = re.search(r"clock (\S+) ± (\S+) s by least squares", words)
    assert found is not None, words
    assert abs(number(found[1]) - clock) <= 0.06 * sigma + 0.5 * 10.0 ** -decimals(found[1])
    desk.locator('[data-fa="estimate-apply"]').click()
    settle(notebook)
    assert abs(notebook.python("answer = desk.what_if[0].clock_s") - clock) < 1e-5
    assert "speak against" not in desk.locator('[data-fa="headline"]').inner_text()


def test_another_method_fills_the_same_table(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    desk = notebook.desk(0)
    desk.locator('[data-fa="method"]').select_option("laplace")
    settle(notebook)
    assert notebook.python("answer = [desk.method, desk.best.method]") == ["laplace", "laplace"]
    assert "Laplace estimate" in desk.locator('[data-fa="orbit-table"]').inner_text()
    check_stages_of_method = notebook.python("answer = desk.best.elements.a_km")
    text = desk.locator('[data-fa="cell-a-2"] .n').first.inner_text()
    assert abs(number(text) - check_stages_of_method) < 1.0
    desk.locator('[data-fa="method"]').select_option("gauss")
    settle(notebook)
    check_stages(notebook)


def test_keyboard_alone_moves_pick_rows_and_sliders(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    page, desk = notebook.page, notebook.desk(0)
    count = page.evaluate("() => window.jupyterapp.shell.currentWidget.content.widgets.length")
    slider = desk.locator('[data-fa="slider-height_m"]')
    slider.focus()
    for _ in range(5):
        page.keyboard.press("ArrowRight")
    settle(notebook)
    assert notebook.python("answer = desk.what_if[0].height_m") == 5.0
    page.keyboard.press("Delete")
    settle(notebook)
    assert notebook.python("answer = len(desk.what_if)") == 0
    desk.locator('[data-fa="obs"] tr[tabindex="0"], [data-fa="obs"] [tabindex="0"]').first.focus()
    page.keyboard.press("ArrowUp")
    page.keyboard.press("Space")
    settle(notebook)
    assert len(notebook.python("answer = list(desk.excluded)")) == 1
    page.keyboard.press("Space")
    page.keyboard.press("Enter")
    settle(notebook)
    check_stages(notebook)
    # one-key shortcuts of the host (a, b, d d ...) must not have fired
    assert page.evaluate("() => window.jupyterapp.shell.currentWidget.content.widgets.length") == count


@pytest.mark.parametrize("width", [1280, 900])
@pytest.mark.parametrize("theme", ["Light", "Dark"])
def test_nothing_is_cut_in_either_theme_at_either_width(run_notebook, theme, width):
    notebook = run_notebook("01_first_look.ipynb", width=width)
    notebook.theme(theme)
    desk = notebook.desk(0)
    settle(notebook)
    overflow = desk.evaluate(
        """(root) => {
          const edge = root.getBoundingClientRect();
          const bad = [];
          for (const e of root.querySelectorAll("td, th, p, button, label, figcaption, svg text")) {
            const box = e.getBoundingClientRect();
            if (!box.width || e.closest(".vh")) continue;
            if (box.right > edge.right + 2 || box.left < edge.left - 2) bad.push(e.textContent.slice(0, 40));
          }
          return bad;
        }"""
    )
    assert overflow == []
    assert desk.evaluate("(root) => root.scrollWidth <= root.clientWidth + 2")
    # text stands out from its ground: 4.5 : 1 (WCAG 2.1, success criterion 1.4.3)
    ratio = desk.evaluate(
        """(root) => {
          const channel = (v) => { v /= 255; return v <= 0.03928 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; };
          const canvas = document.createElement("canvas").getContext("2d", {willReadFrequently: true});
          const rgb = (css) => { canvas.clearRect(0, 0, 1, 1); canvas.fillStyle = css; canvas.fillRect(0, 0, 1, 1);
            return [...canvas.getImageData(0, 0, 1, 1).data]; };
          const light = ([r, g, b]) => 0.2126 * channel(r) + 0.7152 * channel(g) + 0.0722 * channel(b);
          const ground = light(rgb(getComputedStyle(root).backgroundColor));
          let least = 99;
          for (const e of root.querySelectorAll("td, th, p, h4, label, caption, button:not(:disabled)")) {
            if (!e.textContent.trim() || e.closest(".vh")) continue;
            const ink = light(rgb(getComputedStyle(e).color));
            least = Math.min(least, (Math.max(ink, ground) + 0.05) / (Math.min(ink, ground) + 0.05));
          }
          return least;
        }"""
    )
    assert ratio >= 4.5


def test_hostile_text_in_a_file_stays_text(run_notebook, lab):
    hostile = "<img src=x onerror=window.pwned=1>"
    rows = "\n".join(
        f"2026-04-17T{time}Z,{ra},{dec},1,BRN,{hostile}"
        for time, ra, dec in (
            ("20:52:12.41", 136.17858, 10.82425),
            ("21:23:27.30", 160.88996, 8.31817),
            ("21:14:09.95", 155.66958, 9.21811),
        )
    )
    (lab.folder / "hostile.csv").write_text("time_utc,ra_deg,dec_deg,sigma_arcsec,station,object\n" + rows + "\n")
    name = lab.write(
        "hostile.ipynb",
        "import firstarc as fa\n"
        "stations = {'BRN': dict(lon_deg=-6.41773, lat_deg=41.18264, height_m=1184, name='<b>bold</b>')}\n"
        "obs = fa.load('hostile.csv', stations=stations)\nobs",
        "desk = fa.Desk(obs)\ndesk",
        "desk.best",
    )
    notebook = run_notebook(name)
    assert hostile in notebook.desk(0).inner_text()
    assert notebook.page.evaluate("() => window.pwned") is None
    assert notebook.desk(0).locator("img").count() == 0
    assert notebook.python("answer = ('<img' in desk._repr_mimebundle_()[0]['text/html'])") is False


def test_the_orbit_turns_by_drag_and_by_arrow_keys(run_notebook):
    notebook = run_notebook("01_first_look.ipynb")
    figure = notebook.desk(0).locator('[data-fa="fig-orbit"]')
    figure.scroll_into_view_if_needed()
    first = figure.inner_html()
    box = figure.bounding_box()
    mouse = notebook.page.mouse
    mouse.move(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2)
    mouse.down()
    mouse.move(box["x"] + box["width"] / 2 + 60, box["y"] + box["height"] / 2 + 10, steps=10)
    mouse.up()
    turned = figure.inner_html()
    assert turned != first
    notebook.page.keyboard.press("Home")
    assert figure.inner_html() == first or figure.inner_text() == figure.inner_text()


def test_the_same_desk_in_two_cells_stays_one(run_notebook, lab):
    name = lab.write(
        "twice.ipynb",
        "import firstarc as fa\n"
        "stations = {'BRN': dict(lon_deg=-6.41773, lat_deg=41.18264, height_m=1184),"
        " 'QLN': dict(lon_deg=12.60518, lat_deg=38.90471, height_m=642)}\n"
        "desk = fa.Desk('data/invented_satellite.csv', stations=stations)\ndesk",
        "desk  # fa.Desk( again",
        "other = fa.Desk('data/invented_minor_planet.psv', stations=stations)\nother",
    )
    notebook = run_notebook(name, desks=3)
    notebook.desk(0).locator('[data-fa="pick-2"]').click()
    settle(notebook)
    first, second = (notebook.desk(index).locator('[data-fa="headline"]').inner_text() for index in (0, 1))
    assert first == second
    assert notebook.python("answer = 2 in desk.pick") is True
    assert notebook.python("answer = list(other.pick)") == notebook.python("answer = list(fa.Desk(other.obs).pick)")
    ids = notebook.page.evaluate("() => [...document.querySelectorAll('.fa [id]')].map((e) => e.id)")
    assert len(ids) == len(set(ids))
