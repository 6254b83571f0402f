import { make, makeSvg, setAttribute, setText } from "../dom";
import type { Figure, Item } from "../schema/scene";
import { markPath } from "./marks";
import { SvgPool } from "./svg_pool";

export interface FlatFigure {
  root: HTMLElement;
  /** The element whose inner width the kernel draws for. */
  slot: HTMLElement;
  paint(figure: Figure | null, frame: Float32Array): void;
}

/** A polyline of the frame; a break where a point is not finite. */
function linePath(frame: Float32Array, offset: number, points: number): string {
  let path = "";
  let pen = "M";
  for (let index = offset; index < offset + 2 * points; index += 2) {
    const x = frame[index] as number;
    const y = frame[index + 1] as number;
    if (Number.isFinite(x) && Number.isFinite(y)) {
      path += `${pen}${Math.round(x * 10) / 10} ${Math.round(y * 10) / 10}`;
      pen = "L";
    } else {
      pen = "M";
    }
  }
  return path;
}

function paintItem(pool: SvgPool, item: Item, frame: Float32Array): void {
  switch (item[0]) {
    case "line": {
      const [, cls, offset, points] = item;
      pool.put("path", { class: `${cls} ln`, d: linePath(frame, offset, points) });
      break;
    }
    case "seg": {
      const [, cls, x1, y1, x2, y2] = item;
      pool.put("line", { class: cls, x1, y1, x2, y2 });
      break;
    }
    case "mark": {
      const [, cls, shape, x, y, r, title] = item;
      pool.put("path", { class: cls, d: markPath(shape, x, y, r) }, "", title);
      break;
    }
    case "text": {
      const [, cls, x, y, anchor, text] = item;
      pool.put("text", { class: cls, x, y, "text-anchor": anchor }, text);
      break;
    }
    case "rect": {
      const [, cls, x, y, width, height] = item;
      pool.put("rect", { class: cls, x, y, width: Math.max(width, 0), height: Math.max(height, 0) });
      break;
    }
    case "circle": {
      const [, cls, cx, cy, r] = item;
      pool.put("circle", { class: cls, cx, cy, r });
      break;
    }
  }
}

/** Paints a flat figure made by the kernel, at true size, into one SVG that is kept. */
export function flatFigure(
  name: string, options: { bare: boolean; tabindex: number | null },
): FlatFigure {
  const svg = makeSvg("svg", { class: "fig", role: "img", tabindex: options.tabindex });
  if (!options.bare) svg.setAttribute("data-fa", `fig-${name}`);
  const slot = make("div", { class: "slot" }, svg);
  const title = make("span");
  const note = make("span", { class: "u" });
  const caption = make("figcaption", {}, title, " ", note);
  const root = options.bare ? slot : make("figure", { class: `f-${name}` }, caption, slot);
  const pool = new SvgPool(svg);

  return {
    root, slot,
    paint(figure, frame) {
      // Without a figure nothing old may stay in view, but its place is kept.
      if (figure && !options.bare) slot.style.minHeight = `${figure.height}px`;
      svg.toggleAttribute("hidden", figure === null);
      pool.begin();
      if (figure) {
        setAttribute(svg, "width", figure.width);
        setAttribute(svg, "height", figure.height);
        setAttribute(svg, "viewBox", `0 0 ${figure.width} ${figure.height}`);
        setAttribute(svg, "aria-label", figure.label);
        setText(title, figure.caption);
        for (const item of figure.items) paintItem(pool, item, frame);
      }
      setText(note, figure?.note ?? "");
      setAttribute(caption, "title", note.textContent || null);
      caption.hidden = title.textContent === "";
      pool.end();
    },
  };
}
