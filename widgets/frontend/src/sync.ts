import type { Model } from "./model";
import type { Settings } from "./schema/scene";

export interface Waiting {
  /** The newest settings have waited so long that what is shown may no longer be called current. */
  stale: boolean;
  /** Whole seconds waited, 0 below one. */
  seconds: number;
}

const STALE_MS = 250;
const EMPTY: Settings = {
  seq: -1, pick: null, excluded: [], kept: [], estimate: "", station: "", offsets: {}, row_clock: {}, row: 0, candidate: null, method: "",
  held: false,
  widths: { residuals: 0, sky: 0, orbit: 0, root: 0 },
};

/**
 * The one place where settings go to the kernel. One object, newest value wins: changes of one animation frame
 * are merged, and `save_changes` keeps one message in flight with the latest state behind it.
 */
export class Sync {
  private next: Settings | null = null;
  private frame = 0;
  private timer = 0;
  /** Settings not yet answered by a scene, oldest first. */
  private sent: { seq: number; time: number }[] = [];
  private known: number;

  constructor(
    private readonly model: Model,
    private readonly onSettings: () => void,
    private readonly onWaiting: (waiting: Waiting) => void,
  ) {
    this.known = this.newestSeq();
    model.on("change:settings", this.settingsChanged);
    model.on("change:scene", this.sceneChanged);
  }

  /** True when the scene shown answers the newest settings. */
  get settled(): boolean {
    return this.next === null && this.sent.length === 0;
  }

  /** The settings as the controls should show them now. */
  get current(): Settings {
    if (this.next) return this.next;
    const settings = this.model.get("settings");
    const inForce = this.model.get("scene")?.settings;
    // At rest the kernel's word counts: it may have corrected what was asked for.
    return this.sent.length ? { ...EMPTY, ...inForce, ...settings } : { ...EMPTY, ...settings, ...inForce };
  }

  change(edit: (settings: Settings) => Partial<Settings>, atOnce = false): void {
    const before = this.current;
    this.next = { ...before, ...edit(before) };
    // The first change goes at once, those that follow within the same animation frame are merged.
    if (atOnce || !this.frame) this.flush();
    if (this.next) this.onSettings();
    if (!this.frame) this.frame = requestAnimationFrame(() => this.endFrame());
  }

  /** Asks for a repaint without a change, for example when a hand leaves a control untouched. */
  repaint(): void {
    this.onSettings();
  }

  dispose(): void {
    cancelAnimationFrame(this.frame);
    this.flush();
    clearTimeout(this.timer);
    this.model.off("change:settings", this.settingsChanged);
    this.model.off("change:scene", this.sceneChanged);
  }

  private endFrame(): void {
    this.frame = 0;
    this.flush();
  }

  private flush(): void {
    if (!this.next) return;
    const settings = { ...this.next, seq: this.newestSeq() + 1 };
    this.next = null;
    this.model.set("settings", settings);
    this.model.save_changes();
  }

  private newestSeq(): number {
    return Math.max(this.model.get("settings")?.seq ?? -1, this.model.get("scene")?.seq ?? -1);
  }

  /** Runs for our own changes and for those of another view of the same model. */
  private settingsChanged = (): void => {
    const seq = this.model.get("settings")?.seq ?? -1;
    if (seq > this.known) {
      this.known = seq;
      this.sent.push({ seq, time: performance.now() });
      this.watch();
    }
    this.onSettings();
  };

  private sceneChanged = (): void => {
    const answered = this.model.get("scene")?.seq ?? -1;
    this.sent = this.sent.filter((entry) => entry.seq > answered);
    this.watch();
  };

  private watch = (): void => {
    clearTimeout(this.timer);
    const oldest = this.sent[0];
    if (!oldest) {
      this.onWaiting({ stale: false, seconds: 0 });
      return;
    }
    const waited = performance.now() - oldest.time;
    const seconds = Math.floor(waited / 1000);
    this.onWaiting({ stale: waited >= STALE_MS, seconds });
    const until = waited < STALE_MS ? STALE_MS : (seconds + 1) * 1000;
    this.timer = window.setTimeout(this.watch, until - waited + 1);
  };
}
