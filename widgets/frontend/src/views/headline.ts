import { keepChildren, lineText, make, paintLine, setAttribute, setText } from "../dom";
import { dropFromPick } from "../pick";
import type { Action, Scene } from "../schema/scene";
import type { Waiting } from "../sync";
import type { Context, View } from "./view";

const REST_MS = 500;

export interface Headline extends View {
  wait(waiting: Waiting): void;
}

/** The verdict in three lines; a hidden status line repeats it for screen readers, at rest only. */
export function headline(context: Context): Headline {
  const lines: HTMLParagraphElement[] = [];
  const text = make("div", { "data-fa": "headline" });
  const title = make("span", { class: "ti" });
  const subtitle = make("span");
  const busy = make("span", { class: "busy", "data-fa": "busy" });
  const status = make("div", { class: "vh", role: "status", "aria-live": "polite", "data-fa": "status" });
  const root = make("header", { class: "sum" }, text, make("p", { class: "ob" }, title, subtitle, busy), status);
  let scene: Scene | null = null;
  let timer = 0;
  context.cleanUp.add(() => clearTimeout(timer));

  const act = (action: Action): void => context.sync.change((settings) => {
    if (action.do === "reset_what_if") return { offsets: {}, row_clock: {} };
    if (action.do === "include_all") return { excluded: [] };
    const rows = scene?.observations.rows ?? [];
    const row = action.row ?? settings.row;
    const pick = settings.pick ?? rows.filter((r) => r.pick).sort((a, b) => a.pick - b.pick).map((r) => r.row);
    const usable = new Set(rows.filter((r) => r.used).map((r) => r.row));
    const rest = dropFromPick(rows.map((r) => r.row), usable, pick, row);
    return { pick: rest?.length === 3 ? (rest as [number, number, number]) : null };
  }, true);

  return {
    root,
    paint({ scene: shown, settled }) {
      scene = shown;
      keepChildren(text, lines, shown.headline.length, () => make("p"));
      shown.headline.forEach((line, index) => {
        const paragraph = lines[index];
        if (!paragraph) return;
        const last = index === shown.headline.length - 1 && index > 0;
        setAttribute(paragraph, "class", index === 0 ? (shown.bad ? "v bad" : "v") : last ? "wl" : null);
        paintLine(paragraph, line, act);
      });
      setText(title, shown.title);
      setText(subtitle, shown.subtitle);
      clearTimeout(timer);
      if (settled && !shown.settings.held) {
        timer = window.setTimeout(() => setText(status, shown.headline.map(lineText).join(" ")), REST_MS);
      }
    },
    wait({ seconds }) {
      const words = seconds < 1 ? "" : `computing, ${seconds} s`;
      setText(busy, seconds >= 10 ? `${words}; no answer from the kernel yet` : words);
    },
  };
}
