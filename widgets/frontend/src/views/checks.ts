import { keepChildren, make, setAttribute, setText } from "../dom";
import type { Check } from "../schema/scene";
import { flatFigure, type FlatFigure } from "./figure";
import type { View } from "./view";

interface RowNodes {
  verdict: HTMLTableCellElement;
  text: HTMLTableCellElement;
  bar: FlatFigure;
  margin: HTMLTableCellElement;
}

/** Verdicts in words with number, limit and margin; all margins on one rule with the limit in one place. */
export function checks(): View {
  const fails = make("span", { class: "fl" }, "fails");
  const limit = make("span", { class: "lm" }, "|");
  const holds = make("span", { class: "ho" }, "holds, log scale");
  const rule = make("th", { scope: "col", class: "mrh" }, make("div", {}, fails, limit, holds));
  const body = make("tbody");
  const table = make(
    "table", { class: "chk", "data-fa": "checks" }, make("caption", {}, "Checks"),
    make("thead", {}, make("tr", {}, make("th", { scope: "col" }, make("span", { class: "vh" }, "verdict")),
      make("th", { scope: "col" }, make("span", { class: "vh" }, "number and limit")), rule,
      make("th", { scope: "col", class: "mt" }, "margin"))),
    body,
  );
  const root = make("div", { class: "band b3 one" }, table);
  const rows: RowNodes[] = [];
  const trs: HTMLTableRowElement[] = [];

  function makeRow(): HTMLTableRowElement {
    const nodes: RowNodes = {
      verdict: make("th", { scope: "row" }), text: make("td"), margin: make("td", { class: "mt" }),
      bar: flatFigure("margin", { bare: true, tabindex: null }),
    };
    rows.push(nodes);
    return make("tr", {}, nodes.verdict, nodes.text, make("td", { class: "mr" }, nodes.bar.root), nodes.margin);
  }

  /** The words above the bars stand where the bars have their limit. */
  function placeLimit(list: Check[]): void {
    for (const check of list) {
      for (const item of check.bar?.items ?? []) {
        if (item[0] !== "seg" || !item[1].split(" ").includes("lim")) continue;
        table.style.setProperty("--fa-limit", `${item[2]}px`);
        return;
      }
    }
  }

  return {
    root,
    paint({ scene, frame }) {
      // An empty list keeps its place, so that nothing below moves.
      if (rows.length && !scene.checks.length) root.style.minHeight = `${root.offsetHeight}px`;
      while (rows.length > scene.checks.length) rows.pop();
      keepChildren(body, trs, scene.checks.length, makeRow);
      placeLimit(scene.checks);
      scene.checks.forEach((check, index) => {
        const nodes = rows[index];
        const tr = trs[index];
        if (!nodes || !tr) return;
        setAttribute(tr, "class", check.fails ? "fails" : null);
        setText(nodes.verdict, check.verdict);
        setText(nodes.text, check.text);
        setText(nodes.margin, check.margin);
        nodes.bar.paint(check.bar, frame);
      });
    },
  };
}
