import { make, paintLine, setAttribute, setText } from "../dom";
import type { OrbitCell, OrbitRow, OrbitTable } from "../schema/scene";
import { flatFigure } from "./figure";
import type { View } from "./view";

type Column = OrbitTable["columns"][number];
const NOTHING: OrbitCell = { whole: "", fraction: "", agree: 0, step: "", in_sigma: "", dev: false };

/** Widths of the columns in shares; a table of fixed layout does not move while digits change. */
const SHARE = { symbol: 3.2, unit: 4.2, step: 9, value: 12, sigma: 10, recorded: 10, inSigma: 5 };

/** A number split at its point, with the digits that agree underlined. */
interface NumberNodes { root: HTMLSpanElement; parts: { agree: HTMLElement; rest: Text }[] }

function numberNodes(): NumberNodes {
  const parts = [0, 1].map(() => ({ agree: make("b"), rest: document.createTextNode("") }));
  const root = make("span", { class: "n" }, ...parts.map(({ agree, rest }) => make("i", {}, agree, rest)));
  return { root, parts };
}

function paintNumber(nodes: NumberNodes, cell: OrbitCell): void {
  const split = [cell.whole, cell.fraction];
  let left = Math.max(cell.agree, 0);
  split.forEach((text, index) => {
    const part = nodes.parts[index];
    if (!part) return;
    const count = Math.min(left, text.length);
    left -= count;
    setText(part.agree, text.slice(0, count));
    const rest = text.slice(count);
    if (part.rest.data !== rest) part.rest.data = rest;
  });
}

interface CellNodes {
  tds: HTMLTableCellElement[];
  paint(cell: OrbitCell): void;
}

function stageCell(first: boolean, last: boolean, fit: boolean, key: string, index: number): CellNodes {
  const number = numberNodes();
  const value = make("td", { class: last ? "lv" : null, "data-fa": `cell-${key}-${index}` }, number.root);
  const step = make("td", { class: fit ? "dl g ls" : "dl g", "data-fa": `step-${key}-${index}` });
  return {
    tds: first ? [value] : [step, value],
    paint(cell) {
      if (!first) setText(step, cell.step);
      paintNumber(number, cell);
      value.classList.toggle("dev", cell.dev);
    },
  };
}

function sigmaCell(key: string, index: number): CellNodes {
  const td = make("td", { class: "sg", "data-fa": `cell-${key}-${index}` });
  return { tds: [td], paint: (cell) => setText(td, cell.whole + cell.fraction) };
}

function recordedCell(key: string, index: number): CellNodes {
  const change = make("td", { class: "rc", "data-fa": `cell-${key}-${index}` });
  const inSigma = make("td", { class: "ns", "data-fa": `sigma-${key}-${index}` });
  return {
    tds: [change, inSigma],
    paint(cell) {
      setText(change, cell.whole + cell.fraction);
      setText(inSigma, cell.in_sigma);
      change.classList.toggle("on", cell.dev);
      inSigma.classList.toggle("on", cell.dev);
    },
  };
}

/** The rows with every value withdrawn. */
function withdrawn(table: OrbitTable): OrbitRow[] {
  return table.rows.map((row) => ({
    ...row,
    cells: table.columns.map(({ kind }) => (isStage(kind) ? { ...NOTHING, whole: "–" } : NOTHING)),
  }));
}

/** Least squares is shown as the last stage. */
function isStage(kind: Column["kind"]): boolean {
  return kind === "stage" || kind === "fit";
}

function sameColumns(a: OrbitTable, b: OrbitTable | null): boolean {
  return a.columns.map((c) => c.kind).join() === b?.columns.map((c) => c.kind).join();
}

interface RowNodes { tr: HTMLTableRowElement; kind: OrbitRow["kind"]; paint(row: OrbitRow): void }

/** The stages side by side, one element a row, the step from stage to stage between two values. */
export function orbitTable(): View {
  const note = make("span", { class: "u" });
  const none = make("p", { class: "foot none", "data-fa": "orbit-none" });
  const head = make("tr");
  const body = make("tbody");
  const columns = make("colgroup");
  const table = make(
    "table", { class: "stg", tabindex: 0, "data-fa": "orbit-table" },
    make("caption", {}, "Orbit ", note), columns, make("thead", {}, head), body,
  );
  const root = make("div", { class: "band b2" }, make("div", { class: "scr" }, table), none);
  const convergence = flatFigure("convergence", { bare: true, tabindex: null });
  convergence.root.classList.add("mini");
  let signature = "";
  let rows: RowNodes[] = [];
  let heads: { title: Text; sub: HTMLElement }[] = [];
  const widest = { whole: 0, fraction: 0 };
  let last: OrbitTable | null = null;

  function build(table_: OrbitTable): void {
    const element = make("span", { class: "vh" }, "element");
    head.replaceChildren(make("th", { scope: "col", class: "l", colspan: 2 }, element));
    const kinds = table_.columns.map((c) => c.kind);
    const lastStage = kinds.map(isStage).lastIndexOf(true);
    heads = table_.columns.map((column, index) => {
      const title = document.createTextNode("");
      const sub = make("span", { class: "sb" });
      const cls = { stage: "g", fit: "g ls", sigma: "sg", recorded: "rc" }[column.kind];
      const later = isStage(column.kind) && index > 0;
      const arrow = later ? [make("span", { class: "ar", "aria-label": "then" }, "→")] : [];
      const span = column.kind === "recorded" || later ? 2 : null;
      head.append(make("th", { scope: "col", class: cls, colspan: span }, ...arrow, title, sub));
      return { title, sub };
    });
    const shares = [SHARE.symbol, SHARE.unit, ...table_.columns.flatMap((column, index) => {
      if (isStage(column.kind)) return index > 0 ? [SHARE.step, SHARE.value] : [SHARE.value];
      return column.kind === "sigma" ? [SHARE.sigma] : [SHARE.recorded, SHARE.inSigma];
    })];
    const total = shares.reduce((sum, share) => sum + share, 0);
    columns.replaceChildren(...shares.map((share) => {
      const col = make("col");
      col.style.width = `${(100 * share) / total}%`;
      return col;
    }));
    rows = table_.rows.map((row) => makeRow(row, table_.columns, lastStage, kinds.lastIndexOf("stage")));
    body.replaceChildren(...rows.map(({ tr }) => tr));
  }

  function makeRow(row: OrbitRow, columns_: Column[], lastStage: number, traceAfter: number): RowNodes {
    const symbol = make("span", { class: "sy", "aria-hidden": "true" });
    const name = make("span", { class: "vh" });
    const unit = make("td", { class: "un" });
    const element = row.kind === "element";
    const th = make("th", { scope: "row", class: "l", colspan: element ? null : 2 }, symbol, name);
    const tr = make("tr", { class: { element: null, miss: "ms", rms: "ms2" }[row.kind] }, th);
    if (element) tr.append(unit);
    const cells: CellNodes[] = [];
    columns_.forEach((column, index) => {
      // The trace of the convergence takes the places right of the converged orbit in the row of the misses.
      if (row.kind === "miss" && index > traceAfter) return;
      const cell = isStage(column.kind)
        ? stageCell(index === 0, index === lastStage, column.kind === "fit", row.key, index)
        : column.kind === "sigma" ? sigmaCell(row.key, index) : recordedCell(row.key, index);
      cells.push(cell);
      tr.append(...cell.tds);
    });
    if (row.kind === "miss") {
      const width = { stage: 2, fit: 2, sigma: 1, recorded: 2 };
      const span = columns_.slice(traceAfter + 1).reduce((n, c) => n + width[c.kind], 0);
      if (span) tr.append(make("td", { class: "cvm", colspan: span }, convergence.root));
    }
    return {
      tr, kind: row.kind,
      paint(next) {
        paintLine(symbol, element || !next.unit ? next.symbol : [...next.symbol, ` ${next.unit}`]);
        setText(name, ` ${next.name}`);
        setAttribute(th, "title", next.name);
        setText(unit, next.unit);
        cells.forEach((cell, index) => cell.paint(next.cells[index] ?? NOTHING));
      },
    };
  }

  /** One place for the points of all rows; it only widens, so that nothing jumps while dragging. */
  function align(table_: OrbitTable): void {
    for (const row of table_.rows) {
      row.cells.forEach((cell, index) => {
        const kind = table_.columns[index]?.kind;
        if (!kind || !isStage(kind)) return;
        widest.whole = Math.max(widest.whole, cell.whole.length);
        widest.fraction = Math.max(widest.fraction, cell.fraction.length);
      });
    }
    table.style.setProperty("--fa-whole", `${Math.max(widest.whole, 3) - 0.6}ch`);
    table.style.setProperty("--fa-part", `${Math.max(widest.fraction, 2) - 0.45}ch`);
  }

  return {
    root,
    paint({ scene, frame }) {
      // Without values the rows keep their places and show dashes.
      const kept = scene.orbit.rows.length === 0 && sameColumns(scene.orbit, last);
      const table_ = kept && last ? { ...scene.orbit, rows: withdrawn(last) } : scene.orbit;
      last = table_;
      const now = JSON.stringify([table_.columns.map((c) => c.kind), table_.rows.map((r) => [r.key, r.kind])]);
      if (now !== signature) {
        signature = now;
        widest.whole = widest.fraction = 0;
        build(table_);
      }
      setText(note, table_.note);
      table_.columns.forEach((column, index) => {
        const nodes = heads[index];
        if (!nodes) return;
        if (nodes.title.data !== column.title) nodes.title.data = column.title;
        setText(nodes.sub, column.sub || "\u00a0");
      });
      align(table_);
      table_.rows.forEach((row, index) => rows[index]?.paint(row));
      convergence.paint(table_.convergence, frame);
      setText(none, table_.none);
      none.hidden = table_.none === "";
    },
  };
}

