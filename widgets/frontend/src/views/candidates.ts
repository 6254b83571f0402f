import { keepChildren, make, paintLine, setAttribute, setText } from "../dom";
import type { CandidateRow } from "../schema/scene";
import type { Context, View } from "./view";

interface RowNodes {
  tr: HTMLTableRowElement;
  radio: HTMLInputElement;
  letter: Text;
  label: HTMLLabelElement;
  root: HTMLTableCellElement;
  cells: HTMLTableCellElement[];
  reason: HTMLTableCellElement;
}

/** Every root has a row and a letter; the admissible ones form a radio group, the others keep their reason. */
export function candidates(context: Context, rootFunction: HTMLElement): View {
  const note = make("span", { class: "u" });
  const method = make("select", { "aria-label": "method of preliminary determination", "data-fa": "method" });
  const options: HTMLOptionElement[] = [];
  const head = make("tr");
  const heads: HTMLTableCellElement[] = [];
  const body = make("tbody", { role: "radiogroup", "aria-label": "candidate" });
  const table = make(
    "table", { class: "cnd", "data-fa": "candidates" },
    make("caption", {}, make("label", { class: "inl mth" }, "method ", method), "Candidates ", note), make("thead", {}, head), body,
  );
  const root = make("div", { class: "band b1" }, make("div", { class: "scr" }, table), rootFunction);
  const rows: RowNodes[] = [];
  const trs: HTMLTableRowElement[] = [];

  context.cleanUp.on(method, "change", () => {
    context.sync.change(() => ({ method: method.value, candidate: null }), true);
  });
  context.cleanUp.on(body, "change", (event) => {
    const radio = event.target;
    if (radio instanceof HTMLInputElement && radio.checked) {
      context.sync.change(() => ({ candidate: radio.value }), true);
    }
  });
  context.cleanUp.on<MouseEvent>(body, "click", (event) => {
    if (!(event.target instanceof Element) || event.target.closest("label")) return;
    rows.find(({ tr }) => tr.contains(event.target as Element))?.radio.click();
  });

  function makeRow(): HTMLTableRowElement {
    const radio = make("input", { type: "radio", name: `${context.uid}-candidate` });
    const letter = document.createTextNode("");
    const label = make("label", {}, radio, letter);
    const rootCell = make("td", { class: "r" });
    const reason = make("td", { class: "why" });
    const tr = make("tr", {}, make("td", {}, label), rootCell, reason);
    rows.push({ tr, radio, letter, label, root: rootCell, cells: [], reason });
    return tr;
  }

  function paintRow(nodes: RowNodes, row: CandidateRow, columns: number, chosen: boolean): void {
    const { tr, radio, letter, label, cells, reason } = nodes;
    setAttribute(tr, "class", row.admissible ? (chosen ? "sel" : null) : "no");
    setAttribute(tr, "data-fa", `candidate-row-${row.letter}`);
    setAttribute(radio, "data-fa", row.admissible ? `candidate-${row.letter}` : null);
    setAttribute(label, "class", row.admissible ? null : "nol");
    radio.hidden = radio.disabled = !row.admissible;
    if (radio.value !== row.letter) radio.value = row.letter;
    if (radio.checked !== chosen) radio.checked = chosen;
    const name = row.admissible ? ` ${row.letter}` : `✕ ${row.letter}`;
    if (letter.data !== name) letter.data = name;
    setText(nodes.root, row.root);
    const count = row.admissible ? columns : 0;
    while (cells.length < count) {
      const cell = make("td", { class: "r" });
      cells.push(cell);
      reason.before(cell);
    }
    cells.forEach((cell, index) => {
      cell.hidden = index >= count;
      setText(cell, row.cells[index] ?? "");
      cell.classList.toggle("last", index === count - 1);
    });
    reason.hidden = row.admissible;
    setAttribute(reason, "colspan", columns);
    setText(reason, row.reason);
  }

  return {
    root,
    paint({ scene, settings, settled }) {
      const table_ = scene.candidates;
      setText(note, table_.note);
      keepChildren(method, options, table_.methods.length, () => make("option"));
      table_.methods.forEach(({ key, label }, index) => {
        const option = options[index];
        if (!option) return;
        if (option.value !== key) option.value = key;
        setText(option, label);
      });
      const inForce = settled ? table_.method : settings.method;
      if (method.value !== inForce) method.value = inForce;
      keepChildren(head, heads, table_.head.length, (index) =>
        make("th", { scope: "col", class: index === 0 ? null : "r" }));
      table_.head.forEach((line, index) => {
        const cell = heads[index];
        if (cell) paintLine(cell, line);
      });
      while (rows.length > table_.rows.length) rows.pop();
      keepChildren(body, trs, table_.rows.length, makeRow);
      const wanted = settled ? null : settings.candidate;
      table_.rows.forEach((row, index) => {
        const nodes = rows[index];
        if (!nodes) return;
        const chosen = row.admissible && (wanted === null ? row.chosen : row.letter === wanted);
        paintRow(nodes, row, Math.max(table_.head.length - 2, 1), chosen);
      });
    },
  };
}
