import { CleanUp, make } from "./dom";
import { floats, type Model } from "./model";
import type { Settings } from "./schema/scene";
import { Sync, type Waiting } from "./sync";
import { settleTheme } from "./theme";
import { actions } from "./views/actions";
import { candidates } from "./views/candidates";
import { checks } from "./views/checks";
import { flatFigure } from "./views/figure";
import { headline } from "./views/headline";
import { observations } from "./views/observations";
import { orbit3d } from "./views/orbit3d";
import { orbitTable } from "./views/orbit_table";
import type { Context, Shown } from "./views/view";
import { whatIf } from "./views/what_if";

const WIDTH_REST_MS = 120;
const WIDTH_SLACK_PX = 2;

/** Shows the Desk of `model` in `el`; returns its clean-up. One model may be shown in several cells. */
function render({ model, el }: { model: Model; el: HTMLElement }): () => void {
  const cleanUp = new CleanUp();
  const root = make("section", { class: "fa", "aria-label": "Desk", "data-lm-suppress-shortcuts": "true" });
  const sync = new Sync(model, schedule, wait);
  const context: Context = { uid: `fa-${crypto.getRandomValues(new Uint32Array(2)).join("-")}`, sync, cleanUp };

  const head = headline(context);
  const rootFigure = flatFigure("root", { bare: false, tabindex: null });
  const residuals = flatFigure("residuals", { bare: false, tabindex: 0 });
  const sky = flatFigure("sky", { bare: false, tabindex: 0 });
  const orbit = orbit3d(context);
  const views = [
    head, observations(context), whatIf(context), candidates(context, rootFigure.root), orbitTable(),
    checks(), actions(context),
  ] as const;
  const [, obs, offsets, roots, elements, verdicts, takeAway] = views;
  const inner = make(
    "div", { class: "in" }, head.root,
    make("div", { class: "colL" }, obs.root, offsets.root, make("div", { class: "band" }, residuals.root)),
    make("div", { class: "colR" }, roots.root, elements.root, verdicts.root,
      make("div", { class: "band b4" }, sky.root, orbit.root)),
    takeAway.root,
  );
  const empty = make("p", { class: "foot" }, "The Desk has not had its first answer from the kernel.");
  root.append(empty);
  el.append(root);
  keepKeys(root, cleanUp);

  let due = false;
  let frame = floats(null);
  let frameOf: DataView | null | undefined = null;
  let paintedSeq: number | null = null;

  /** One painting for all that arrives together, in time for the very next frame. */
  function schedule(): void {
    if (due) return;
    due = true;
    queueMicrotask(() => {
      if (due) paint();
    });
  }

  function wait(waiting: Waiting): void {
    inner.classList.toggle("st", waiting.stale);
    head.wait(waiting);
  }

  function paint(): void {
    due = false;
    const scene = model.get("scene");
    if (!scene?.headline) return;
    if (empty.parentNode) empty.replaceWith(inner);
    const bytes = model.get("frame");
    if (bytes !== frameOf) {
      frameOf = bytes;
      frame = floats(bytes);
    }
    const shown: Shown = { scene, settings: sync.current, settled: sync.settled, frame };
    for (const view of views) view.paint(shown);
    residuals.paint(scene.figures.residuals, frame);
    sky.paint(scene.figures.sky, frame);
    rootFigure.paint(scene.figures.root, frame);
    orbit.paint(scene.figures.orbit, frame);
    root.dataset["faHeld"] = String(shown.settings.held);
    root.dataset["faSettled"] = String(shown.settled);
    root.setAttribute("aria-label", scene.title ? `Desk: ${scene.title}` : "Desk");
    if (paintedSeq === null) measure();
    paintedSeq = scene.seq;
    root.dataset["faSeq"] = String(scene.seq);
  }

  // Figures are drawn by the kernel at true size, so it must know how wide their places are.
  let measuring = 0;
  let measured: Settings["widths"] | null = null;
  function measure(): void {
    clearTimeout(measuring);
    if (!root.isConnected || !root.clientWidth) return;
    const widths: Settings["widths"] = {
      residuals: residuals.slot.clientWidth, sky: sky.slot.clientWidth,
      orbit: orbit.slot.clientWidth, root: rootFigure.slot.clientWidth,
    };
    const keys = Object.keys(widths) as (keyof typeof widths)[];
    const before = measured ?? sync.current.widths;
    if (keys.every((key) => Math.abs(widths[key] - (before[key] ?? 0)) <= WIDTH_SLACK_PX)) return;
    measured = widths;
    sync.change(() => ({ widths }));
  }
  // The first report comes when the host has put `el` into the page: only then is there a ground to measure.
  let themed = false;
  const observer = new ResizeObserver(() => {
    if (!themed && root.isConnected) {
      themed = true;
      settleTheme(root);
    }
    clearTimeout(measuring);
    measuring = window.setTimeout(measure, WIDTH_REST_MS);
  });
  observer.observe(root);

  model.on("change:scene", schedule);
  model.on("change:frame", schedule);
  cleanUp.add(() => {
    model.off("change:scene", schedule);
    model.off("change:frame", schedule);
    observer.disconnect();
    clearTimeout(measuring);
    due = false;
    if (sync.current.held) sync.change(() => ({ held: false }), true);
    sync.dispose();
    root.remove();
  });
  paint();

  return () => cleanUp.run();
}

/**
 * Keys stay inside the Desk: the host's one-key shortcuts must not fire. Combinations with Ctrl, Alt or Meta are the
 * host's (save, undo); the mark that suppresses its shortcuts is lifted while such a key is down.
 */
function keepKeys(root: HTMLElement, cleanUp: CleanUp): void {
  const modified = (event: KeyboardEvent): boolean => event.ctrlKey || event.metaKey || event.altKey;
  for (const type of ["keydown", "keypress", "keyup"]) {
    cleanUp.on<KeyboardEvent>(root, type, (event) => {
      const host = modified(event);
      if (host) root.removeAttribute("data-lm-suppress-shortcuts");
      else root.setAttribute("data-lm-suppress-shortcuts", "true");
      if (!host) event.stopPropagation();
    });
  }
}

export default { render };
