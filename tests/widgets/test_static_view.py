"""The kept picture: self-contained, escaped, with the numbers of the Desk, readable as plain text."""

from __future__ import annotations

import math
import re
from html.parser import HTMLParser
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest

from firstarc.errors import FirstArcError
from firstarc.widgets import static_view
from firstarc.widgets.figures.svg_painter import cut_at_body, figure_svg, space_svg
from firstarc.widgets.static_view import static_html, static_text

HOSTILE = '<img src=x onerror="alert(1)">&<script>alert(2)</script>'
SVG = "{http://www.w3.org/2000/svg}"


class Reader(HTMLParser):
    """Elements, attributes and text of a page, and whether its elements are nested properly."""

    VOID = frozenset({"img", "br", "input"})

    def __init__(self, html: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[str] = []
        self.attributes: list[tuple[str, str]] = []
        self.texts: list[str] = []
        self.feed(html)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += [(name, value or "") for name, value in attrs]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.attributes += [(name, value or "") for name, value in attrs]

    def handle_endtag(self, tag: str) -> None:
        assert self.open and self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if not self.open or self.open[-1] != "style":
            self.texts.append(data)


def test_the_picture_is_well_formed_and_self_contained(build_scene: Any) -> None:
    scene, frame = build_scene(ghost=True)
    reader = Reader(static_html(scene, frame, css=".fa{}"))
    assert reader.open == []
    assert reader.tags.count("svg") == 5
    assert "script" not in reader.tags and "link" not in reader.tags and "img" not in reader.tags
    fetched = [value for name, value in reader.attributes if name in ("src", "href", "srcset", "data", "action")]
    assert fetched == []
    assert not any(name.startswith("on") for name, _ in reader.attributes)
    assert "url(" not in static_view._STATIC_CSS and "@import" not in static_view._STATIC_CSS


def test_it_shows_the_numbers_of_the_desk(build_scene: Any) -> None:
    scene, frame = build_scene()
    text = "".join(Reader(static_html(scene, frame, css="")).texts)
    for row in scene["observations"]["rows"]:
        assert row["ra"] in text and row["oc_dec"] in text and row["time"] in text
    for row in scene["orbit"]["rows"]:
        for cell in row["cells"]:
            assert cell["whole"] + cell["fraction"] in text
    for check in scene["checks"]:
        assert check["text"] in text
    for column in scene["orbit"]["columns"]:
        assert column["title"] in text and column["sub"] in text
    assert "rejected: perigee" in text
    assert scene["code"] in text


def test_the_least_squares_column_stands_out_in_every_row(build_scene: Any) -> None:
    """Heading and values carry the class of the last column; the row of the miss leaves it to the convergence."""
    scene, frame = build_scene()
    html = static_html(scene, frame, css="")
    table = html[html.index('<table class="stg">') : html.index("</table>", html.index('<table class="stg">'))]
    values = [row for row in scene["orbit"]["rows"] if row["kind"] == "element"]
    assert '<th scope="col" class="lv">Least squares<span class="sb">8 rows, perturbed</span></th>' in table
    assert table.count('<td class="lv">') == len(values)
    assert '<td class="lv"><span class="n"><i>24\u2009468</i><i></i></span></td>' in table
    assert '<td class="cvm" colspan="3">' in table, "fit, sigma and change give way to the convergence"
    for body_row in table.split("<tbody>")[1].split("</tr>")[:-1]:
        spans = [int(n) - 1 for n in re.findall(r'colspan="(\d+)"', body_row)]
        assert len(re.findall(r"<td", body_row)) + sum(spans) == len(scene["orbit"]["columns"])


def test_while_held_the_column_says_what_it_waits_for(build_scene: Any) -> None:
    scene, frame = build_scene()
    scene["orbit"]["columns"][3]["sub"] = "when the hand rests"
    for row in scene["orbit"]["rows"]:
        row["cells"][3].update(whole="–" if row["kind"] == "element" else "", fraction="")
    scene["headline"][0] = ["Computing."]
    scene["candidates"]["rows"] = []
    text = "".join(Reader(static_html(scene, frame, css="")).texts)
    assert "when the hand rests" in text and "24\u2009468" not in text
    assert "24\u2009468" not in static_text(scene)


def test_underlined_digits_are_those_that_agree(build_scene: Any) -> None:
    scene, frame = build_scene()
    html = static_html(scene, frame, css="")
    assert "<i><b>0</b></i><i><b>.7</b>0759</i>" in html
    assert '<span class="n"><i>1</i><i>.994</i></span>' in html


@pytest.mark.parametrize(
    "put",
    [
        lambda scene: scene.update(title=HOSTILE),
        lambda scene: scene.update(code=HOSTILE),
        lambda scene: scene["warnings"].append(HOSTILE),
        lambda scene: scene["headline"].__setitem__(0, [HOSTILE, {"t": HOSTILE, "b": 1}]),
        lambda scene: scene["observations"]["rows"][0].update(station=HOSTILE),
        lambda scene: scene["candidates"]["rows"][1].update(reason=HOSTILE),
        lambda scene: scene["checks"][0].update(text=HOSTILE),
        lambda scene: scene["orbit"].update(note=HOSTILE),
        lambda scene: scene["orbit"].update(none=HOSTILE),
        lambda scene: scene["figures"]["sky"].update(note=HOSTILE, label=HOSTILE),
        lambda scene: scene["figures"]["sky"]["items"].append(("text", "t", 1, 1, "start", HOSTILE)),
        lambda scene: scene["figures"]["sky"]["items"].append(("mark", "mk", "circle", 1, 1, 4, HOSTILE)),
        lambda scene: scene["figures"]["orbit"]["marks"][0].update(title=HOSTILE, text=HOSTILE),
    ],
)
def test_text_from_files_stays_text(build_scene: Any, put: Any) -> None:
    scene, frame = build_scene()
    put(scene)
    html = static_html(scene, frame, css="")
    reader = Reader(html)
    assert "img" not in reader.tags and "script" not in reader.tags
    assert "<script" not in html and "<img" not in html
    found = "".join(reader.texts) + "".join(value for _, value in reader.attributes)
    assert HOSTILE in found, "the text is shown, not dropped"


def test_both_themes_are_served(build_scene: Any) -> None:
    scene, frame = build_scene()
    html = static_html(scene, frame, css='[data-jp-theme-light="false"] .fa{--fa-now:#56b4e9}')
    assert "@media (prefers-color-scheme:dark)" in html
    assert ".fa.static:not([data-jp-theme-light] *)" in html


def test_a_tree_without_a_built_front_end_says_what_to_do(
    build_scene: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    scene, frame = build_scene()
    monkeypatch.setattr(static_view, "_CSS_FILE", tmp_path / "desk.css")
    static_view._desk_css.cache_clear()
    with pytest.raises(FirstArcError, match=r"desk\.css is missing.*npm run build"):
        static_html(scene, frame)
    (tmp_path / "desk.css").write_text(".fa{color:red}</style><script>", encoding="utf-8")
    html = static_html(scene, frame)
    static_view._desk_css.cache_clear()
    assert ".fa{color:red}" in html
    assert html.count("</style>") == 1


def test_figures_that_are_missing_leave_the_rest(build_scene: Any) -> None:
    scene, frame = build_scene()
    for name in scene["figures"]:
        scene["figures"][name] = None
    scene["orbit"].update(none="Row 4 points 17° below the horizon of BRN.", convergence=None)
    scene["checks"] = []
    scene["candidates"]["rows"] = []
    reader = Reader(static_html(scene, frame, css=""))
    assert "svg" not in reader.tags
    assert "Row 4 points 17° below the horizon of BRN." in "".join(reader.texts)
    assert "Row 4 points 17° below the horizon of BRN." in static_text(scene)


def test_plain_text_lines_up_its_columns(build_scene: Any) -> None:
    scene, _ = build_scene()
    text = static_text(scene)
    lines = text.splitlines()
    first = next(i for i, line in enumerate(lines) if line.startswith("row"))
    table = lines[first + 1 : first + 1 + len(scene["observations"]["rows"])]
    assert len({line.index(row["dec"]) for line, row in zip(table, scene["observations"]["rows"], strict=True)}) == 1
    assert "<" not in text
    assert lines[0] == "0417-A invented"
    assert text.endswith(scene["code"])
    assert "semi-major axis, km" in text and "24\u2009468" in text


# ---- painting


def _elements(svg: str, tag: str) -> list[ElementTree.Element]:
    return list(ElementTree.fromstring(svg).iter(SVG + tag))


def test_flat_figures_are_painted_item_by_item(build_scene: Any) -> None:
    scene, frame = build_scene(ghost=True)
    for name in ("residuals", "sky", "root"):
        figure = scene["figures"][name]
        root = ElementTree.fromstring(figure_svg(figure, frame))
        assert len(list(root)) == len(figure["items"])
        assert root.get("aria-label") == figure["label"]
        assert float(root.get("width", "0")) == figure["width"]


def test_every_shape_is_painted_about_its_point() -> None:
    for shape in ("circle", "triangle", "square", "diamond", "down", "plus", "cross", "x"):
        figure = {"width": 100, "height": 100, "label": "", "items": [("mark", "mk", shape, 50, 40, 4, "")]}
        (element,) = list(ElementTree.fromstring(figure_svg(figure, b"")))
        if shape == "circle":
            assert (element.get("cx"), element.get("cy")) == ("50.0", "40.0")
            continue
        numbers = np.array([float(v) for v in re.findall(r"-?[\d.]+", element.get("d", ""))]).reshape(-1, 2)
        assert np.abs(numbers - [50, 40]).max() <= 5.01
        assert (numbers.max(axis=0) >= [52, 42]).all() and (numbers.min(axis=0) <= [48, 38]).all()


def test_what_lies_behind_the_body_is_painted_before_it(build_scene: Any) -> None:
    """A ring about the body, seen along the equator: half of it is before the disc, half behind."""
    scene, frame = build_scene()
    figure = scene["figures"]["orbit"]
    svg = space_svg(figure, frame)
    children = [child.get("class", "") for child in ElementTree.fromstring(svg)]
    disc = children.index("earth")
    assert any(css.startswith("grat eq") for css in children[:disc])
    assert any(css.startswith("grat eq") for css in children[disc:])


def test_polylines_are_cut_where_they_pass_the_body_plane() -> None:
    angle = np.radians(np.arange(0.0, 361.0, 10.0) + 5.0)
    ring = np.c_[np.cos(angle), np.zeros(angle.size), np.sin(angle)]
    front, back = cut_at_body(ring)
    # From 5° to 180° before, from 180° to 360° behind, and from 360° to 365° before again.
    assert len(front) == 2 and len(back) == 1
    length = sum(float(np.hypot(*np.diff(piece, axis=0).T).sum()) for piece in front + back)
    whole = float(np.hypot(*np.diff(ring[:, :2], axis=0).T).sum())
    assert length == pytest.approx(whole, abs=1e-9)
    assert back[0][0][0] == pytest.approx(-1.0, abs=0.01) and back[0][-1][0] == pytest.approx(1.0, abs=0.01)


def test_marks_are_painted_where_the_stated_projection_puts_them(build_scene: Any) -> None:
    scene, frame = build_scene()
    figure = scene["figures"]["orbit"]
    ra, dec = math.radians(figure["view"]["ra_deg"]), math.radians(figure["view"]["dec_deg"])
    right = np.array([-math.sin(ra), math.cos(ra), 0.0])
    up = np.array([-math.sin(dec) * math.cos(ra), -math.sin(dec) * math.sin(ra), math.cos(dec)])
    k = (min(figure["width"], figure["height"] - 24) / 2 - 14) / figure["extent"]
    circles = _elements(space_svg(figure, frame), "circle")
    for mark in (m for m in figure["marks"] if m["shape"] == "circle"):
        q = np.subtract(mark["p"], figure["middle"])
        x, y = figure["width"] / 2 + k * q @ right, (figure["height"] - 24) / 2 - k * q @ up
        found = [c for c in circles if c.find(SVG + "title") is not None and c[0].text == mark["title"]]
        assert float(found[0].get("cx", "0")) == pytest.approx(x, abs=0.06)
        assert float(found[0].get("cy", "0")) == pytest.approx(y, abs=0.06)
    scale = figure["scale"]["length"] * k
    bar = _elements(space_svg(figure, frame), "line")[-3]
    assert float(bar.get("x2", "0")) - float(bar.get("x1", "0")) == pytest.approx(scale, abs=0.11)
    label = ElementTree.fromstring(space_svg(figure, frame)).get("aria-label", "")
    hours, minutes, degrees = re.search(r"seen from RA (\d+)ʰ(\d+)ᵐ, Dec ([+−]\d+)°", label).groups()  # type: ignore[union-attr]
    assert (int(hours) + int(minutes) / 60) * 15 == pytest.approx(figure["view"]["ra_deg"], abs=0.13)
    assert float(degrees.replace("−", "-")) == figure["view"]["dec_deg"]
