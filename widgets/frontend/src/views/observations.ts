import { keepChildren, make, setAttribute, setText } from "../dom";
import { dropFromPick, putIntoPick } from "../pick";
import type { ObservationRow, Shape } from "../schema/scene";
import type { Context, Shown, View } from "./view";

const SHAPES: Record<Shape, string> = {
  circle: "●", triangle: "▲", square: "■", diamond: "◆", down: "▼", plus: "✚",
};
const HEADS: [string, string][] = [
  ["pick", ""], ["in", ""], ["row", "r"], ["time", "r"], ["station", ""], ["RA\u2002h m s", "r"],
  ["Dec\u2002° ′ ″", "r"], ["O−C RA", "r"], ["Dec", "r"], ["/σ", "r"],
];
const PICK_RULE = "Takes the place of the nearest picked row (the earlier of two); the pick stays in row order.";

interface RowNodes {
  tr: HTMLTableRowElement;
  pick: HTMLButtonElement;
  used: HTMLInputElement;
  cells: HTMLTableCellElement[];
  code: Text;
  shape: HTMLSpanElement;
  /** Residual cells: the text, and a hidden bracket that keeps digits in column. */
  residuals: { cell: HTMLTableCellElement; text: Text; bracket: HTMLSpanElement }[];
}

/** The sightings: one stop for the keyboard; arrows move, space takes in or out, Enter puts into the pick. */
export function observations(context: Context): View {
  const { sync, cleanUp } = context;
  const note = make("span", { class: "u" });
  const body = make("tbody");
  const heads = HEADS.map(([title, cls]) => make("th", { scope: "col", class: cls || null }, title));
  const head = make("tr", {}, ...heads);
  const table = make(
    "table", { class: "obs", role: "grid", "data-fa": "obs", "aria-describedby": `${context.uid}-keys` },
    make("caption", {}, make("span"), " ", note), make("thead", {}, head), body,
  );
  const caption = table.caption?.firstElementChild as HTMLElement;
  const foot = make("p", { class: "foot" });
  const keys = make(
    "p", { class: "vh", id: `${context.uid}-keys` },
    "Arrow keys move, space takes the row in or out, Enter puts it into the pick.",
  );
  const warnings = make("ul", { class: "ck", "data-fa": "warnings", "aria-label": "Doubts about the input" });
  const warningItems: HTMLLIElement[] = [];
  const scroller = make("div", { class: "scr" }, table);
  const root = make("div", { class: "band" }, scroller, foot, warnings, keys);

  const rows: RowNodes[] = [];
  const trs: HTMLTableRowElement[] = [];
  let shown: Shown | null = null;
  const data = (): ObservationRow[] => shown?.scene.observations.rows ?? [];
  const rowAt = (target: EventTarget | null): number =>
    target instanceof Element ? trs.findIndex((tr) => tr.contains(target)) : -1;

  const pickOf = (): number[] => shown?.settings.pick
    ?? data().filter((r) => r.pick).sort((a, b) => a.pick - b.pick).map((r) => r.row);
  const select = (row: number): void => sync.change((s) => (s.row === row ? {} : { row }));
  const put = (row: number): void => sync.change((s) => {
    const pick = putIntoPick(data().map((r) => r.row), s.pick ?? pickOf(), row);
    return pick.length === 3 ? { row, pick: pick as [number, number, number] } : { row };
  }, true);
  const isUsed = (row: ObservationRow): boolean => {
    if (!shown || shown.settled) return row.used;
    if (shown.settings.excluded.includes(row.row)) return false;
    if (shown.settings.kept.includes(row.row)) return true;
    return row.used || shown.scene.settings.excluded.includes(row.row);
  };
  const toggle = (row: ObservationRow): void => {
    const out = isUsed(row);
    sync.change((s) => {
      const other = (rows: number[]): number[] => rows.filter((number) => number !== row.row);
      const joined = (rows: number[]): number[] => [...other(rows), row.row].sort((a, b) => a - b);
      if (!out) {
        // A row that the fit rejected comes back only by being kept against the rejection.
        return s.excluded.includes(row.row) ? { excluded: other(s.excluded) } : { kept: joined(s.kept) };
      }
      const excluded = joined(s.excluded);
      const kept = other(s.kept);
      const pick = s.pick ?? pickOf();
      if (!pick.includes(row.row)) return { excluded, kept };
      // A picked row leaves the pick as well; without another row to take its place it stays in.
      const usable = new Set(data().filter(isUsed).map((r) => r.row));
      const rest = dropFromPick(data().map((r) => r.row), usable, pick, row.row);
      return rest?.length === 3 ? { excluded, kept, pick: rest as [number, number, number] } : {};
    }, true);
  };

  cleanUp.on<MouseEvent>(body, "click", (event) => {
    const row = data()[rowAt(event.target)];
    if (!row || !(event.target instanceof Element)) return;
    if (event.target.closest("button")) put(row.row);
    else if (event.target instanceof HTMLInputElement) toggle(row);
    else select(row.row);
  });
  cleanUp.on<KeyboardEvent>(body, "keydown", (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    const index = rowAt(event.target);
    const row = data()[index];
    if (!row) return;
    const goal = { ArrowUp: index - 1, ArrowDown: index + 1, Home: 0, End: rows.length - 1 }[event.key];
    if (goal !== undefined) {
      event.preventDefault();
      const target = data()[Math.min(Math.max(goal, 0), rows.length - 1)];
      if (!target) return;
      select(target.row);
      trs[data().indexOf(target)]?.focus();
    } else if (event.target === trs[index] && event.key === " ") {
      event.preventDefault();
      toggle(row);
    } else if (event.target === trs[index] && event.key === "Enter") {
      event.preventDefault();
      put(row.row);
    }
  });

  function makeRow(): HTMLTableRowElement {
    const pick = make("button", { type: "button", class: "pk", tabindex: -1, title: PICK_RULE });
    const used = make("input", { type: "checkbox", tabindex: -1 });
    const code = document.createTextNode("");
    const shape = make("span", { class: "sh", "aria-hidden": "true" });
    const cells = ["r", "r", "", "r", "r"].map((cls) => make("td", { class: cls || null }));
    cells[2]?.append(code, " ", shape);
    const residuals = ["r oc", "r oc", "r ch"].map((cls) => {
      const text = document.createTextNode("");
      const bracket = make("span", { class: "hp", "aria-hidden": "true" }, ")");
      return { cell: make("td", { class: cls }, text, bracket), text, bracket };
    });
    const tr = make(
      "tr", {}, make("td", {}, pick), make("td", {}, used), ...cells, ...residuals.map((r) => r.cell),
    );
    rows.push({ tr, pick, used, cells, code, shape, residuals });
    return tr;
  }

  function paintRow(nodes: RowNodes, row: ObservationRow, state: Shown): void {
    const { settings, settled } = state;
    const number = row.number;
    const chosen = settled ? row.pick : pickOf().indexOf(row.row) + 1;
    const selected = settled ? row.selected : settings.row === row.row;
    const used = isUsed(row);
    setAttribute(nodes.tr, "class", [selected ? "sel" : "", used ? "" : "rej"].filter(Boolean).join(" ") || null);
    setAttribute(nodes.tr, "aria-selected", selected ? "true" : "false");
    setAttribute(nodes.tr, "tabindex", selected ? 0 : -1);
    setAttribute(nodes.tr, "data-fa", `row-${row.row}`);
    setAttribute(nodes.pick, "class", chosen ? "pk on" : "pk");
    setAttribute(nodes.pick, "data-fa", `pick-${row.row}`);
    setAttribute(
      nodes.pick, "aria-label",
      chosen ? `row ${number} is number ${chosen} of the pick` : `put row ${number} into the pick`,
    );
    setText(nodes.pick, chosen ? String(chosen) : "·");
    if (nodes.used.checked !== used) nodes.used.checked = used;
    setAttribute(nodes.used, "data-fa", `in-${row.row}`);
    setAttribute(nodes.used, "aria-label", `row ${number} in the fit`);
    [number, row.time, "", row.ra, row.dec].forEach((text, index) => {
      const cell = nodes.cells[index];
      if (cell && index !== 2) setText(cell, text);
    });
    if (nodes.code.data !== row.station) nodes.code.data = row.station;
    setText(nodes.shape, SHAPES[row.shape] ?? "");
    [row.oc_ra, row.oc_dec, row.chi].forEach((text, index) => {
      const residual = nodes.residuals[index];
      if (!residual) return;
      if (residual.text.data !== text) residual.text.data = text;
      residual.bracket.hidden = text.endsWith(")");
    });
    nodes.residuals[2]?.cell.classList.toggle("big", row.big);
  }

  return {
    root,
    paint(state) {
      shown = state;
      const { observations: table_, warnings: doubts } = state.scene;
      setText(caption, table_.caption);
      setText(note, table_.note);
      setText(foot, table_.foot);
      while (rows.length > table_.rows.length) rows.pop();
      keepChildren(body, trs, table_.rows.length, makeRow);
      scroller.classList.toggle("long", table_.rows.length > 24);
      table_.rows.forEach((row, index) => {
        const nodes = rows[index];
        if (nodes) paintRow(nodes, row, state);
      });
      // One stop for the keyboard, also when no row is selected.
      if (trs[0] && !trs.some((tr) => tr.tabIndex === 0)) trs[0].tabIndex = 0;
      keepChildren(warnings, warningItems, doubts.length, () => make("li"));
      doubts.forEach((text, index) => {
        const item = warningItems[index];
        if (item) setText(item, text);
      });
      warnings.hidden = doubts.length === 0;
    },
  };
}
