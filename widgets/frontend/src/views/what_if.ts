import { CleanUp, keepChildren, make, setAttribute, setText } from "../dom";
import { typedOffset } from "../typed_offset";
import type { Offsets, Settings, Slider } from "../schema/scene";
import type { Context, Shown, View } from "./view";

type Key = Slider["key"];

const GROUP = "What-if: offsets that are never written into the observations";

/** The settings with one offset replaced; zero removes it, so that "no what-if" has one spelling. */
function withOffset(settings: Settings, key: Key, value: number): Partial<Settings> {
  if (key === "row_clock") {
    const row_clock = { ...settings.row_clock };
    if (value === 0) delete row_clock[settings.row];
    else row_clock[settings.row] = value;
    return { row_clock };
  }
  const station = { ...settings.offsets[settings.station] };
  if (value === 0) delete station[key];
  else station[key] = value;
  const offsets = { ...settings.offsets };
  if (Object.keys(station).length) offsets[settings.station] = station;
  else delete offsets[settings.station];
  return { offsets };
}

function offsetOf(settings: Settings, key: Key): number {
  if (key === "row_clock") return settings.row_clock[settings.row] ?? 0;
  return settings.offsets[settings.station]?.[key] ?? 0;
}

interface SliderRow {
  root: HTMLElement;
  paint(slider: Slider, shown: Shown): void;
}

function sliderRow(context: Context, key: Key, report: (text: string) => void): SliderRow {
  const { sync, cleanUp, uid } = context;
  const id = `${uid}-${key}`;
  const name = make("label", { for: id });
  const tick = make("span", { class: "rt", title: "recorded" });
  const bar = make("span", { class: "dv" });
  const range = make("input", { type: "range", id, "data-fa": `slider-${key}` });
  const box = make("input", {
    type: "text", class: "nb", inputmode: "decimal", autocomplete: "off", spellcheck: "false",
    "data-fa": `box-${key}`, "data-lm-suppress-shortcuts": "true", "aria-describedby": `${uid}-typed`,
  });
  const unit = make("span", { class: "un" });
  const change = make("span", { class: "cg", "data-fa": `change-${key}` });
  const reset = make("button", { type: "button", class: "rs", "data-fa": `reset-${key}` }, "reset");
  const root = make(
    "div", { class: "wi" }, name,
    make("span", { class: "sl" }, make("span", { class: "rail" }), tick, bar, range), box, unit, change, reset,
  );
  let slider: Slider | null = null;
  let typing = false;
  const grip = new CleanUp();
  cleanUp.add(() => grip.run());

  const send = (value: number, atOnce = false): void => sync.change((s) => withOffset(s, key, value), atOnce);
  const release = (): void => {
    if (!held()) return;
    grip.run();
    root.removeAttribute("data-held");
    if (sync.current.held) sync.change(() => ({ held: false }), true);
    else sync.repaint();
  };
  const held = (): boolean => root.hasAttribute("data-held");
  const toRecorded = (): void => {
    range.value = "0";
    typing = false;
    send(0, true);
  };

  cleanUp.on<PointerEvent>(range, "pointerdown", (event) => {
    if (event.button !== 0) return;
    root.setAttribute("data-held", "");
    for (const type of ["pointerup", "pointercancel", "blur"]) grip.on(window, type, release, { capture: true });
  });
  cleanUp.on(range, "input", () => {
    const value = Number(range.value);
    sync.change((s) => ({ ...withOffset(s, key, value), ...(held() ? { held: true } : {}) }));
  });
  cleanUp.on(range, "change", release);
  cleanUp.on(range, "dblclick", toRecorded);
  cleanUp.on<KeyboardEvent>(range, "keydown", (event) => {
    if (event.key !== "Delete") return;
    event.preventDefault();
    toRecorded();
  });
  cleanUp.on(reset, "click", () => {
    range.focus();
    toRecorded();
  });

  const commit = (): void => {
    if (!typing || !slider) return;
    const result = typedOffset(box.value, slider);
    const wrong = typeof result === "string";
    setAttribute(box, "aria-invalid", wrong ? "true" : null);
    report(wrong ? `${slider.label}: ${result}` : "");
    if (wrong) return;
    typing = false;
    send(result, true);
  };
  const restore = (): void => {
    typing = false;
    setAttribute(box, "aria-invalid", null);
    report("");
    if (slider) box.value = slider.box;
  };
  cleanUp.on(box, "input", () => { typing = box.value !== slider?.box; });
  cleanUp.on(box, "blur", commit);
  cleanUp.on<KeyboardEvent>(box, "keydown", (event) => {
    if (event.key === "Enter") commit();
    else if (event.key === "Escape") restore();
    else return;
    event.preventDefault();
  });

  return {
    root,
    paint(next, { settings, settled }) {
      const another = slider !== null && slider.label !== next.label;
      slider = next;
      if (another && typing) restore();
      const value = settled && !held() ? next.value : offsetOf(settings, key);
      setText(name, next.label);
      setText(unit, next.unit);
      setText(change, next.change);
      setAttribute(box, "aria-label", next.unit ? `${next.label}, ${next.unit}` : next.label);
      setAttribute(reset, "aria-label", `reset ${next.label} to recorded`);
      setAttribute(range, "aria-valuetext", next.valuetext);
      root.classList.toggle("dev", value !== 0);
      reset.disabled = value === 0;
      const low = Math.min(next.min, value);
      const high = Math.max(next.max, value);
      if (!held()) {
        // Limits first: a range input clips its value to them.
        setAttribute(range, "min", low);
        setAttribute(range, "max", high);
        setAttribute(range, "step", next.step);
        if (Number(range.value) !== value) range.value = String(value);
      }
      const percent = (offset: number): number =>
        (100 * (offset - Number(range.min))) / (Number(range.max) - Number(range.min) || 1);
      const zero = percent(0);
      const here = percent(value);
      tick.style.left = `${zero}%`;
      bar.style.left = `${Math.min(zero, here)}%`;
      bar.style.width = `${Math.abs(here - zero)}%`;
      // Between a change and its answer the box keeps what was typed; while dragging it follows the scenes.
      if (!typing && (settled || held()) && box.value !== next.box) box.value = next.box;
    },
  };
}

/** Station and clock offsets; never written into the observations. */
export function whatIf(context: Context): View {
  const { sync, cleanUp, uid } = context;
  const station = make("select", { "aria-label": "station for the what-if", "data-fa": "station" });
  const options: HTMLOptionElement[] = [];
  const resetAll = make("button", { type: "button", class: "lk", "data-fa": "reset-all" }, "reset all");
  const wrong = make("p", { class: "foot dvt", id: `${uid}-typed`, role: "alert", "data-fa": "typed" });
  const list = make("div");
  const kinds = { clock: "estimate clock", station: "estimate place" } as const;
  const asks = (Object.keys(kinds) as (keyof typeof kinds)[]).map((kind) => {
    const button = make("button", { type: "button", class: "lk", "data-fa": `estimate-${kind}` }, kinds[kind]);
    cleanUp.on(button, "click", () => sync.change((s) => ({ estimate: `${kind}:${s.station}` }), true));
    return button;
  });
  const answer = make("span", { "data-fa": "estimate" });
  const takeOver = make("button", { type: "button", class: "lk", "data-fa": "estimate-apply" }, "set as what-if");
  let offered: { station: string; offsets: Offsets } = { station: "", offsets: {} };
  cleanUp.on(takeOver, "click", () => sync.change((s) => ({
    estimate: "", station: offered.station,
    offsets: { ...s.offsets, [offered.station]: { ...s.offsets[offered.station], ...offered.offsets } },
  }), true));
  const estimates = make("p", { class: "foot est" }, ...asks.flatMap((button) => [button, " "]), answer, " ", takeOver);
  const group = make(
    "div", { class: "wif", role: "group", "aria-label": GROUP },
    make("div", { class: "hd" }, make("h4", {}, "What-if"), make("label", { class: "inl" }, "station ", station),
      make("span", { class: "grow" }), resetAll),
    make("div", { class: "wih", "aria-hidden": "true" }, make("span"), make("span", { class: "rec" }, "▾ recorded"),
      make("span"), make("span"), make("span", { class: "cg" }, "change"), make("span")),
    list, wrong, estimates,
  );
  const root = make("div", { class: "band" }, group);
  const rows = new Map<Key, SliderRow>();
  const report = (text: string): void => {
    setText(wrong, text);
    wrong.hidden = text === "";
  };
  report("");

  cleanUp.on(station, "change", () => sync.change(() => ({ station: station.value }), true));
  cleanUp.on(resetAll, "click", () => {
    if (resetAll.getAttribute("aria-disabled") === "true") return;
    sync.change(() => ({ offsets: {}, row_clock: {} }), true);
  });

  return {
    root,
    paint(shown) {
      const panel = shown.scene.what_if;
      keepChildren(station, options, panel.stations.length, () => make("option"));
      panel.stations.forEach(({ code, label }, index) => {
        const option = options[index];
        if (!option) return;
        if (option.value !== code) option.value = code;
        setText(option, label);
      });
      const code = shown.settled ? panel.station : shown.settings.station;
      if (station.value !== code) station.value = code;
      const { offsets, row_clock } = shown.settings;
      const any = shown.settled ? panel.any : Object.keys(offsets).length + Object.keys(row_clock).length > 0;
      setAttribute(resetAll, "aria-disabled", any ? null : "true");
      for (const slider of panel.sliders) {
        let row = rows.get(slider.key);
        if (!row) {
          row = sliderRow(context, slider.key, report);
          rows.set(slider.key, row);
          list.append(row.root);
        }
        row.paint(slider, shown);
      }
      const { asked, text, offsets: found, station: of } = panel.estimate;
      offered = { station: of, offsets: found };
      setText(answer, shown.settings.estimate && shown.settings.estimate !== asked ? "estimating" : text);
      takeOver.hidden = Object.keys(found).length === 0 || shown.settings.estimate !== asked;
      const keys = new Set(panel.sliders.map((slider) => slider.key));
      for (const [key, row] of rows) row.root.hidden = !keys.has(key);
    },
  };
}
