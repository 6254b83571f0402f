"""What stays in the cell: the determination as tables and pictures, without script, and as plain text."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache
from html import escape
from pathlib import Path
from typing import Any

from firstarc.errors import FirstArcError
from firstarc.widgets.figures.marks import SHAPE_SIGNS
from firstarc.widgets.figures.orbit_space import TURN_HINT
from firstarc.widgets.figures.svg_painter import figure_svg, space_svg

_CSS_FILE = Path(__file__).parent / "static" / "desk.css"

#: Rules of the static record alone; everything else is the Desk's own style sheet.
_STATIC_CSS = """
.fa.static table{table-layout:auto;margin:0}.fa.static .l{text-align:left}
.fa.static tbody tr,.fa.static tbody tr:nth-child(odd),.fa.static tbody tr:hover{background:none}
.fa.static .colL,.fa.static .colR{padding-top:9px;min-width:0}
.fa.static figure{margin:8px 0 0;min-width:0}
.fa.static svg.fig{width:auto;max-width:100%;height:auto}
.fa.static .pair{display:flex;flex-wrap:wrap;column-gap:18px}.fa.static .pair figure{flex:1 1 300px}
.fa.static .cvm{padding:2px 0;text-align:left}.fa.static .cvm figure{margin:0;float:right}
.fa.static .sum{padding-right:0}
.fa.static .ck{margin:8px 0;padding:0;list-style:none;font-size:12px;line-height:1.4}
.fa.static .ck .fails b{color:var(--fa-dev)}
.fa.static .n b{font-weight:400}
.fa.static tr.close td,.fa.static tr.close th{border-top:1px solid var(--fa-rule2);border-bottom:0}
.fa.static tr.close+tr.close td,.fa.static tr.close+tr.close th{border-top:0}
.fa.static pre{grid-column:1/-1;margin:0;padding:8px 0;border-top:1px solid var(--fa-rule2)}
.fa.static pre,.fa.static pre code{white-space:pre-wrap;overflow-wrap:anywhere;background:none;
color:var(--fa-ink2);font:12px/1.45 var(--jp-code-font-family,monospace)}
.fa.static .cnv{display:flex;flex-wrap:wrap;align-items:flex-start;gap:0 18px;padding-bottom:9px}
.fa.static .cnv table{flex:1 1 330px;width:auto}.fa.static .cnv figure{margin:0}
.fa.static .cnd th,.fa.static .cnd td{vertical-align:baseline}.fa.static .cvm svg.fig{max-width:none}
.fa.static .why,.fa.static .stg thead th{white-space:normal}.fa.static .stg .close th{vertical-align:middle}
/* Where no host says which theme it is, the reader's own setting decides. */
@media (prefers-color-scheme:dark){.fa.static:not([data-jp-theme-light] *){
--jp-layout-color0:#111;--jp-layout-color1:#212121;--jp-layout-color2:#424242;--jp-ui-font-color0:#fff;
--jp-border-color1:#616161;--jp-border-color2:#424242;--fa-now:#56b4e9;--fa-dev:#e69f00}}
"""


NO_BREAK = "\u00a0"


def static_html(scene: dict[str, Any], frame: bytes, css: str | None = None) -> str:
    """The determination as self-contained HTML: no script, nothing fetched, every text escaped.

    Parameters
    ----------
    scene : dict
        What the Desk shows, see ``widgets/frontend/src/schema/scene.ts``.
    frame : bytes
        The points of its lines, float32.
    css : str, optional
        Style sheet; the Desk's own one when left out.

    Returns
    -------
    str
        One ``<section>`` with its own ``<style>``.

    Raises
    ------
    FirstArcError
        If the Desk's style sheet is missing because the front end of a source tree was not built.
    """
    style = (_desk_css() if css is None else css) + _STATIC_CSS
    figures = scene["figures"]
    residuals, sky, root, orbit = (figures[name] for name in ("residuals", "sky", "root", "orbit"))
    left = _observations(scene["observations"], scene["warnings"]) + _figure(residuals, frame)
    right = (
        f'<div class="cnv">{_candidates(scene["candidates"])}{_figure(root, frame, bare=True)}</div>'
        + _orbit(scene["orbit"], frame)
        + _checks(scene["checks"])
        + f'<div class="pair">{_figure(sky, frame)}{_figure(orbit, frame, space=True)}</div>'
    )
    return (
        f"<style>{style}</style>"
        '<section class="fa static" aria-label="Static record of the determination"><div class="in">'
        f'{_headline(scene)}<div class="colL">{left}</div><div class="colR">{right}</div>'
        f"<pre><code>{escape(scene['code'])}</code></pre></div></section>"
    )


def static_text(scene: dict[str, Any]) -> str:
    """The determination as plain text, for readers without HTML."""
    lines = [plain(line) for line in scene["headline"]]
    lines = [line for line in lines if line]
    name = " ".join(part for part in (scene["title"], scene["subtitle"]) if part)
    blocks = ["\n".join([name, *lines] if name else lines)]
    observations = scene["observations"]
    head = ["row", "pick", "time", "station", "RA h m s", "Dec ° ′ ″", "O−C RA", "Dec", "/σ"]
    rows = [
        [
            row["number"],
            str(row["pick"] or ""),
            row["time"],
            row["station"],
            row["ra"],
            row["dec"],
            row["oc_ra"],
            row["oc_dec"],
            row["chi"] + ("" if row["used"] else " out"),
        ]
        for row in observations["rows"]
    ]
    title = f"{observations['caption']} {observations['note']}".strip()
    blocks.append("\n".join([title, *_aligned([head, *rows]), *scene["warnings"]]))
    orbit = scene["orbit"]
    title = f"Orbit {orbit['note']}".strip()
    if orbit["none"]:
        blocks.append(f"{title}\n{orbit['none']}")
    else:
        head = ["", *(column["title"] for column in orbit["columns"])]
        rows = [[_element_name(row), *(_cell_text(cell) for cell in row["cells"])] for row in orbit["rows"]]
        blocks.append("\n".join([title, *_aligned([head, *rows])]))
    if scene["checks"]:
        blocks.append("\n".join(_check_sentence(check) for check in scene["checks"]))
    rejected = [
        f"root {row['letter']} at {row['root']}: {row['reason']}"
        for row in scene["candidates"]["rows"]
        if row["reason"]
    ]
    if rejected:
        blocks.append("\n".join(rejected))
    blocks.append(scene["code"])
    return "\n\n".join(blocks)


def plain(line: Sequence[Any]) -> str:
    """A line of runs as plain text."""
    return "".join(run if isinstance(run, str) else run["t"] for run in line)


@lru_cache(maxsize=1)
def _desk_css() -> str:
    if not _CSS_FILE.is_file():
        raise FirstArcError(
            f"the Desk's style sheet {_CSS_FILE.name} is missing: the front end is not built. "
            "Run `npm ci` and `npm run build` in widgets/frontend, or install the package with pip."
        )
    # "</" cannot end the style element early, whatever the sheet holds.
    return _CSS_FILE.read_text(encoding="utf-8").replace("</", "<\\/")


def _runs_html(line: Sequence[Any]) -> str:
    out = []
    for run in line:
        if isinstance(run, str):
            out.append(escape(run))
            continue
        text = escape(run["t"])
        for key, tag in (("sub", "sub"), ("em", "em"), ("b", "strong")):
            if run.get(key):
                text = f"<{tag}>{text}</{tag}>"
        classes = " ".join(css for key, css in (("k", "k"), ("dev", "dvt")) if run.get(key))
        out.append(f'<span class="{classes}">{text}</span>' if classes else text)
    return "".join(out)


def _headline(scene: dict[str, Any]) -> str:
    verdict, second, what_if = scene["headline"]
    name = ", ".join(part for part in (scene["title"], scene["subtitle"]) if part)
    kept = "Kept picture of the Desk; run the cell to work with it." + (f" {name}." if name else "")
    bad = " bad" if scene["bad"] else ""
    third = "" if scene["what_if"]["any"] else "wl"
    return (
        f'<header class="sum{bad}"><p class="v">{_runs_html(verdict)}</p><p>{_runs_html(second)}</p>'
        f'<p class="{third}">{_runs_html(what_if)}</p><p class="wl">{escape(kept)}</p></header>'
    )


def _observations(table: dict[str, Any], warnings: Sequence[str]) -> str:
    heads = (
        ("r", "row"),
        ("r", "time"),
        ("l", "station"),
        ("r", "RA h m s"),
        ("r", "Dec ° ′ ″"),
        ("r", "O−C RA"),
        ("r", "Dec"),
        ("r", "/σ"),
    )
    head = "".join(f'<th scope="col" class="{css}">{text}</th>' for css, text in heads)
    body = []
    for row in table["rows"]:
        number = f"{row['number']} ■" if row["pick"] else row["number"]
        station = f"{row['station']} {SHAPE_SIGNS[row['shape']]}"
        big = " big" if row["big"] else ""
        cells = (("r", number), ("r", row["time"]), ("l", station), ("r", row["ra"]), ("r", row["dec"]),
                 ("r", row["oc_ra"]), ("r", row["oc_dec"]), (f"r{big}", row["chi"]))  # fmt: skip
        body.append("<tr>" + "".join(f'<td class="{css}">{escape(text)}</td>' for css, text in cells) + "</tr>")
    note = "; ".join(text for text in (table["note"], "■ pick, ( ) out") if text)
    doubts = "".join(f'<p class="foot">{escape(text)}</p>' for text in warnings)
    foot = f'<p class="foot">{escape(table["foot"])}</p>' if table["foot"] else ""
    return (
        f'<table class="obs"><caption>{escape(table["caption"])} '
        f'<span class="u">{escape(note)}</span></caption>'
        f"<thead><tr>{head}</tr></thead><tbody>{''.join(body)}</tbody></table>{foot}{doubts}"
    )


def _orbit(table: dict[str, Any], frame: bytes) -> str:
    caption = f'<caption>Orbit <span class="u">{escape(table["note"])}</span></caption>'
    if table["none"]:
        none = f'<tr><td class="l why">{escape(table["none"])}</td></tr>'
        return f'<table class="stg">{caption}<tbody>{none}</tbody></table>'
    kinds = {"stage": "", "fit": "lv", "sigma": "sg", "recorded": "rc"}
    head = '<th scope="col" class="l"><span class="vh">element</span></th>'
    for column in table["columns"]:
        sub = f'<span class="sb">{escape(column["sub"] or NO_BREAK)}</span>'
        head += f'<th scope="col" class="{kinds[column["kind"]]}">{escape(column["title"])}{sub}</th>'
    body = []
    for row in table["rows"]:
        cells = []
        trace = table["convergence"] if row["kind"] == "miss" else None
        for column, cell in zip(table["columns"], row["cells"], strict=True):
            if trace and column["kind"] != "stage":
                continue
            css = kinds[column["kind"]] + (" on" if cell["dev"] else "")
            cells.append(f'<td class="{css.strip()}">{_cell_html(cell, column["kind"])}</td>')
        if trace:
            rest = sum(column["kind"] != "stage" for column in table["columns"])
            cells.append(f'<td class="cvm" colspan="{rest}">{_figure(trace, frame, bare=True)}</td>')
        close = "" if row["kind"] == "element" else ' class="close"'
        name = escape(_element_name(row))
        body.append(f'<tr{close}><th scope="row" class="l">{name}</th>{"".join(cells)}</tr>')
    return f'<table class="stg">{caption}<thead><tr>{head}</tr></thead><tbody>{"".join(body)}</tbody></table>'


def _element_name(row: dict[str, Any]) -> str:
    name = str(row["name"]) if row["kind"] == "element" and row["name"] else plain(row["symbol"])
    return f"{name}, {row['unit']}" if row["unit"] else name


def _cell_text(cell: dict[str, Any]) -> str:
    text = f"{cell['whole']}{cell['fraction']}"
    return f"{text} ({cell['in_sigma']} σ)" if cell["in_sigma"] else text


def _cell_html(cell: dict[str, Any], kind: str) -> str:
    if kind not in ("stage", "fit"):
        return escape(_cell_text(cell))
    whole, fraction, agree = cell["whole"], cell["fraction"], cell["agree"]
    inner = _agreeing(whole, agree), _agreeing(fraction, max(agree - len(whole), 0))
    return f'<span class="n"><i>{inner[0]}</i><i>{inner[1]}</i></span>'


def _agreeing(text: str, agree: int) -> str:
    """The first ``agree`` characters underlined."""
    agree = min(agree, len(text))
    return (f"<b>{escape(text[:agree])}</b>" if agree else "") + escape(text[agree:])


def _checks(checks: Sequence[dict[str, Any]]) -> str:
    if not checks:
        return ""
    items = []
    for check in checks:
        fails = ' class="fails"' if check["fails"] else ""
        sentence = _check_sentence(check).removeprefix(check["verdict"])
        items.append(f"<li{fails}><b>{escape(check['verdict'])}</b>{escape(sentence)}</li>")
    return f'<ul class="ck">{"".join(items)}</ul>'


def _check_sentence(check: dict[str, Any]) -> str:
    margin = f", margin {check['margin']}" if check["margin"] else ""
    return f"{check['verdict']}: {check['text'].rstrip('.')}{margin}."


def _candidates(table: dict[str, Any]) -> str:
    if not table["rows"]:
        return ""
    columns = max(len(table["head"]) - 2, 1)
    head = "".join(f'<th scope="col">{_runs_html(line)}</th>' for line in table["head"])
    body = []
    for row in table["rows"]:
        sign = "●" if row["chosen"] else "○" if row["admissible"] else "×"
        lead = f'<th scope="row">{sign} {escape(row["letter"])}</th><td>{escape(row["root"])}</td>'
        if row["reason"]:
            cells = f'<td class="l why" colspan="{columns}">{escape(row["reason"])}</td>'
        else:
            cells = "".join(f"<td>{escape(text)}</td>" for text in row["cells"])
        body.append(f'<tr class="{"" if row["admissible"] else "no"}">{lead}{cells}</tr>')
    caption = f'<caption>Candidates <span class="u">{escape(table["note"])}</span></caption>'
    rows = "".join(body)
    return f'<table class="cnd">{caption}<thead><tr>{head}</tr></thead><tbody>{rows}</tbody></table>'


def _figure(figure: dict[str, Any] | None, frame: bytes, *, space: bool = False, bare: bool = False) -> str:
    if figure is None:
        return ""
    svg = space_svg(figure, frame) if space else figure_svg(figure, frame)
    if bare or not figure["caption"]:
        return f"<figure>{svg}</figure>"
    words = figure["note"].removesuffix(TURN_HINT).removesuffix(", ")
    note = f' <span class="u">{escape(words)}</span>' if words else ""
    return f"<figure><figcaption>{escape(figure['caption'])}{note}</figcaption>{svg}</figure>"


def _aligned(rows: Sequence[Sequence[str]]) -> list[str]:
    """Rows of a table as lines with right-aligned columns, the first one left."""
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    return [
        "  ".join(
            text.ljust(width) if column == 0 else text.rjust(width)
            for column, (text, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in rows
    ]
