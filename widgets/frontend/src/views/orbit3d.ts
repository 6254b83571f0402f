import { make, makeSvg, setAttribute, setText } from "../dom";
import type { Figure3D, Point } from "../schema/scene";
import { placeLabels, type Label } from "./label_places";
import { markPath } from "./marks";
import { cutAtBody, directionText, projection, type ViewDirection } from "./projection";
import { SvgPool } from "./svg_pool";
import type { Context } from "./view";

const STEP_DEG = 5;
const DEG_PER_PX = 0.5;
const FOOT_PX = 24;
const MARGIN_PX = 14;

export interface OrbitFigure {
  root: HTMLElement;
  /** The element whose inner width the kernel draws for. */
  slot: HTMLElement;
  paint(figure: Figure3D | null, frame: Float32Array): void;
}

/** The orbit in space: drag or arrow keys turn it, Home restores; a turned view stays turned. */
export function orbit3d(context: Context): OrbitFigure {
  const { cleanUp } = context;
  const svg = makeSvg("svg", { class: "fig turn", role: "img", tabindex: 0, "data-fa": "fig-orbit" });
  const pool = new SvgPool(svg);
  const slot = make("div", { class: "slot" }, svg);
  const title = make("span");
  const note = make("span", { class: "u" });
  const caption = make("figcaption", {}, title, " ", note);
  const root = make("figure", { class: "f-orbit" }, caption, slot);
  let figure: Figure3D | null = null;
  let frame = new Float32Array(0) as Float32Array;
  /** The direction chosen by the reader; null follows the kernel's. */
  let turned: ViewDirection | null = null;
  let request = 0;
  cleanUp.add(() => cancelAnimationFrame(request));

  const view = (): ViewDirection => turned ?? figure?.view ?? { ra_deg: 0, dec_deg: 0 };
  const turn = (dRa: number, dDec: number): void => {
    const { ra_deg, dec_deg } = view();
    turned = {
      ra_deg: (((ra_deg + dRa) % 360) + 360) % 360,
      dec_deg: Math.min(90, Math.max(-90, dec_deg + dDec)),
    };
    if (!request) request = requestAnimationFrame(draw);
  };

  cleanUp.on<KeyboardEvent>(svg, "keydown", (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    const step: [number, number] | undefined = ({
      ArrowLeft: [STEP_DEG, 0], ArrowRight: [-STEP_DEG, 0], ArrowUp: [0, -STEP_DEG], ArrowDown: [0, STEP_DEG],
    } as Record<string, [number, number]>)[event.key];
    if (step) turn(...step);
    else if (event.key === "Home") {
      turned = null;
      draw();
    } else return;
    event.preventDefault();
  });

  let from: { id: number; x: number; y: number } | null = null;
  cleanUp.on<PointerEvent>(svg, "pointerdown", (event) => {
    if (event.button !== 0) return;
    from = { id: event.pointerId, x: event.clientX, y: event.clientY };
    svg.setPointerCapture(event.pointerId);
    svg.focus({ preventScroll: true });
    event.preventDefault();
  });
  cleanUp.on<PointerEvent>(svg, "pointermove", (event) => {
    if (from?.id !== event.pointerId) return;
    turn(-(event.clientX - from.x) * DEG_PER_PX, (event.clientY - from.y) * DEG_PER_PX);
    from = { id: event.pointerId, x: event.clientX, y: event.clientY };
  });
  for (const type of ["pointerup", "pointercancel", "lostpointercapture"]) {
    cleanUp.on(svg, type, () => { from = null; });
  }

  function draw(): void {
    request = 0;
    pool.begin();
    if (figure) drawScene(figure);
    pool.end();
  }

  function drawScene(fig: Figure3D): void {
    const { width, height } = fig;
    const scale = (Math.min(width, height - FOOT_PX) / 2 - MARGIN_PX) / (fig.extent || 1);
    const project = projection(view(), scale, [width / 2, (height - FOOT_PX) / 2], fig.middle);
    const curves = [
      ...fig.lines.map(({ cls, offset, points }) => ({ cls: `${cls} ln`, points: polyline(offset, points) })),
      ...fig.segs.map(({ cls, a, b }) => ({ cls, points: [project.point(...a), project.point(...b)] })),
    ];
    const cuts = curves.map(({ cls, points }) => ({ cls, ...cutAtBody(points) }));
    const marks = fig.marks.map((mark) => ({ mark, p: project.point(...mark.p) }));
    const paintMarks = (front: boolean): void => {
      for (const { mark, p } of marks) {
        if (p[2] >= 0 !== front) continue;
        pool.put("path", { class: mark.cls, d: markPath(mark.shape, p[0], p[1], mark.r) }, "", mark.title);
      }
    };

    for (const { cls, back } of cuts) pool.put("path", { class: cls, d: back });
    paintMarks(false);
    const [bx, by] = project.point(0, 0, 0);
    const radius = fig.body_radius * scale;
    // Below one pixel the body becomes a cross; the caption says so.
    if (radius < 1) pool.put("path", { class: "tick", d: markPath("cross", bx, by, 4) });
    else pool.put("circle", { class: "earth", cx: tenth(bx), cy: tenth(by), r: tenth(radius) });
    for (const { cls, front } of cuts) pool.put("path", { class: cls, d: front });
    paintMarks(true);

    const labels: Label[] = [
      ...marks.filter(({ mark }) => mark.text).map(({ mark, p }) => ({
        cls: mark.cls.includes("tick") ? "t" : "t strong", text: mark.text, x: p[0], y: p[1], r: mark.r,
      })),
      ...fig.labels.map(({ cls, p, text }) => {
        const [x, y] = project.point(...p);
        return { cls, text, x, y, r: 0 };
      }),
    ];
    const foot = { left: 0, right: width, top: height - FOOT_PX + 4, bottom: height };
    const busy = [...marks.map(({ p }) => p), ...curves.flatMap(({ points }) => thinned(points))];
    for (const { cls, x, y, anchor, text } of placeLabels(labels, width, height, [foot], busy)) {
      pool.put("text", { class: cls, x: tenth(x), y: tenth(y), "text-anchor": anchor }, text);
    }
    drawFoot(fig, scale);

    function polyline(offset: number, points: number): Point[] {
      const list: Point[] = [];
      for (let i = offset; i < offset + 3 * points; i += 3) {
        list.push(project.point(frame[i] as number, frame[i + 1] as number, frame[i + 2] as number));
      }
      return list;
    }
  }

  /** Scale bar at the left, the direction of view at the right. */
  function drawFoot(fig: Figure3D, scale: number): void {
    const y = fig.height - 10;
    const [x1, x2] = [12, tenth(12 + fig.scale.length * scale)];
    pool.put("line", { class: "ax", x1, y1: y, x2, y2: y });
    pool.put("line", { class: "ax", x1, y1: y - 3, x2: x1, y2: y + 3 });
    pool.put("line", { class: "ax", x1: x2, y1: y - 3, x2, y2: y + 3 });
    pool.put("text", { class: "t", x: x2 + 6, y: y + 4, "text-anchor": "start" }, fig.scale.text);
    const seen = `seen from ${directionText(view())}`;
    pool.put("text", { class: "t", x: fig.width - 6, y: y + 4, "text-anchor": "end" }, seen);
    setAttribute(svg, "aria-label", `${fig.label} It is ${seen}; arrow keys turn it by 5°, Home restores.`);
  }

  return {
    root, slot,
    paint(next, floats) {
      figure = next;
      frame = floats;
      svg.toggleAttribute("hidden", next === null);
      if (next) {
        slot.style.minHeight = `${next.height}px`;
        setAttribute(svg, "width", next.width);
        setAttribute(svg, "height", next.height);
        setAttribute(svg, "viewBox", `0 0 ${next.width} ${next.height}`);
        setText(title, next.caption);
      }
      setText(note, next?.note ?? "");
      setAttribute(caption, "title", note.textContent || null);
      caption.hidden = title.textContent === "";
      cancelAnimationFrame(request);
      draw();
    },
  };
}

/** At most about forty points of a line, and points along a straight one: where labels should not stand. */
function thinned(points: Point[]): Point[] {
  const [a, b] = points;
  if (points.length === 2 && a && b) {
    const [dx, dy] = [(b[0] - a[0]) / 12, (b[1] - a[1]) / 12];
    return Array.from({ length: 13 }, (_, i) => [a[0] + dx * i, a[1] + dy * i, 0]);
  }
  const stride = Math.ceil(points.length / 40);
  return points.filter((_, index) => index % stride === 0);
}

function tenth(value: number): number {
  return Math.round(value * 10) / 10;
}
