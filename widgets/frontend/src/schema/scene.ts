/**
 * What crosses between kernel and browser. Every word, digit and figure geometry is made in Python;
 * the browser paints it, reads input and turns the 3-D view. Text is always set with textContent.
 */

/** Browser to kernel. Newest value wins: one object, replaced whole, numbered by the browser. */
export interface Settings {
  seq: number;
  /** Rows are positions in the Desk's observations, from 0. */
  pick: [number, number, number] | null;
  /** Rows taken out by hand, and rows kept in against the automatic rejection. */
  excluded: number[];
  kept: number[];
  /** What is to be estimated from the recorded observations: "clock:CODE", "station:CODE" or "". */
  estimate: string;
  /** Station whose offsets the sliders show. */
  station: string;
  /** Offsets per station code; absent = zero. */
  offsets: Record<string, Offsets>;
  /** Time offsets per row, s. */
  row_clock: Record<string, number>;
  /** Selected row. */
  row: number;
  /** Root letter of the chosen candidate, or null for the best. */
  candidate: string | null;
  /** Method of preliminary determination. */
  method: string;
  /** True while a slider is held: the kernel may leave out what is slow, and scales hold still. */
  held: boolean;
  /** Inner widths of the figure slots, px. */
  widths: { residuals: number; sky: number; orbit: number; root: number };
}
export interface Offsets { lat_deg?: number; lon_deg?: number; height_m?: number; clock_s?: number }

/** A run of text; `k` keeps it on one line, `b` bold, `dev` what-if or failed check, `sub` subscript, `em` italic. */
export interface RunText { t: string; k?: 1; b?: 1; dev?: 1; sub?: 1; em?: 1; act?: Action }
export type Run = string | RunText;
export interface Action { do: "drop_from_pick" | "reset_what_if" | "include_all"; row?: number }
export type Line = Run[];

export interface Scene {
  /** seq of the settings that this scene answers; -1 for the first. */
  seq: number;
  ok: boolean;
  title: string;
  subtitle: string;
  /** Headline: verdict, second line, what-if line (always three). */
  headline: Line[];
  bad: boolean;
  observations: ObservationTable;
  what_if: WhatIfPanel;
  candidates: CandidateTable;
  orbit: OrbitTable;
  checks: Check[];
  figures: { residuals: Figure | null; sky: Figure | null; root: Figure | null; orbit: Figure3D | null };
  code: string;
  /** Doubts about the input, shown under the observations. */
  warnings: string[];
  /** The settings in force (the kernel may have corrected them). */
  settings: Settings;
}

export interface ObservationTable {
  caption: string;
  note: string;
  foot: string;
  rows: ObservationRow[];
}
export interface ObservationRow {
  /** `row` identifies the row (position from 0); `number` is what is shown (row of the loaded input, from 1). */
  row: number; number: string; pick: 0 | 1 | 2 | 3; used: boolean; selected: boolean;
  time: string; station: string; shape: Shape; ra: string; dec: string;
  /** Residuals as shown; "" when there is no orbit. In parentheses when the row is out. */
  oc_ra: string; oc_dec: string; chi: string; big: boolean;
}
export type Shape = "circle" | "triangle" | "square" | "diamond" | "down" | "plus";

export interface WhatIfPanel {
  stations: { code: string; label: string }[];
  station: string;
  any: boolean;
  sliders: Slider[];
  /** What was asked to be estimated, the answer in words, and the offsets that take it over as a what-if. */
  estimate: { asked: string; text: string; offsets: Offsets; station: string };
}
export interface Slider {
  key: "lat_deg" | "lon_deg" | "height_m" | "clock_s" | "row_clock";
  label: string; unit: string;
  /** Offsets; the recorded value is offset 0. */
  min: number; max: number; step: number; value: number;
  /** Text of the number box. offset = typed - base; for a time of day, base is seconds of day and typed text is hh:mm:ss.sss. */
  box: string; base: number; kind: "number" | "time_of_day";
  change: string; changed: boolean; valuetext: string;
}

export interface CandidateTable {
  note: string;
  /** Methods to choose from, and the one in force. */
  methods: { key: string; label: string }[];
  method: string;
  head: Line[];
  rows: CandidateRow[];
}
export interface CandidateRow {
  letter: string; admissible: boolean; chosen: boolean; root: string;
  /** Cells after the root column (all heads but the first two), or the reason why it is rejected. */
  cells: string[]; reason: string;
}

export interface OrbitTable {
  note: string;
  columns: { title: string; sub: string; kind: "stage" | "fit" | "sigma" | "recorded" }[];
  rows: OrbitRow[];
  /** Sentence shown instead of the values when no stage has any. */
  none: string;
  convergence: Figure | null;
}
export interface OrbitRow {
  key: string; symbol: Line; name: string; unit: string;
  cells: OrbitCell[];
  /** "miss" and "rms" rows close the table. */
  kind: "element" | "miss" | "rms";
}
/** One cell per column. A value is split before the decimal point; the first `agree` characters of whole+fraction are underlined. */
export interface OrbitCell {
  whole: string; fraction: string; agree: number;
  /** Step from the column at the left, shown between the two values; "" for none. */
  step: string;
  /** Second figure of the recorded column: the change in sigma. */
  in_sigma: string;
  /** Drawn in the what-if colour. */
  dev: boolean;
}

export interface Check { verdict: string; text: string; fails: boolean; margin: string; bar: Figure | null }

/** A flat figure in px at true size, y down. */
export interface Figure {
  width: number; height: number;
  /** One sentence that states the finding, for screen readers. */
  label: string;
  caption: string; note: string;
  items: Item[];
}
/** First the kind, then the CSS class(es): see desk.css. */
export type Item =
  | ["line", string, number, number] // class, offset in floats in the frame, points (x, y pairs)
  | ["seg", string, number, number, number, number] // class, x1 y1 x2 y2
  | ["mark", string, MarkShape, number, number, number, string] // class, shape, x, y, radius, tooltip
  | ["text", string, number, number, "start" | "middle" | "end", string]
  | ["rect", string, number, number, number, number]
  | ["circle", string, number, number, number];
export type MarkShape = Shape | "cross" | "x";

/** The orbit in space: the browser projects and paints. Points in one length unit, ICRF axes, x y z triples in the frame. */
export interface Figure3D {
  width: number; height: number; label: string; caption: string; note: string;
  /**
   * `middle` is the point shown at x = width / 2, y = (height - 24) / 2 (the last 24 px belong to the scale bar);
   * px per unit k = (min(width, height - 24) / 2 - 14) / extent.
   * The body is a sphere about the origin; below 1 px a cross stands for it.
   */
  middle: Point; extent: number; body_radius: number; body: "earth" | "sun";
  /**
   * Default view: ICRF direction from which the scene is seen, orthographic, north up. With v that direction,
   * right = (-sin ra, cos ra, 0), up = v x right: x = cx + k (p - middle).right, y = cy - k (p - middle).up.
   * A point is hidden by the body where p.v < 0 and its distance from the body's centre on the picture is less than
   * the radius; hidden parts of lines, segs and marks are left out.
   */
  view: { ra_deg: number; dec_deg: number };
  lines: { cls: string; offset: number; points: number }[];
  /** `text` stands near its mark: plain (class "t") for a "tick", else bold ("t strong"). */
  marks: { cls: string; shape: MarkShape; p: Point; r: number; text: string; title: string }[];
  labels: { cls: string; p: Point; text: string }[];
  segs: { cls: string; a: Point; b: Point }[];
  scale: { length: number; text: string };
}
export type Point = [number, number, number];
