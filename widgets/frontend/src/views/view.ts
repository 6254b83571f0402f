import type { CleanUp } from "../dom";
import type { Scene, Settings } from "../schema/scene";
import type { Sync } from "../sync";

/** What a view needs from the Desk it is part of. */
export interface Context {
  /** Prefix of ids and radio names: two Desks in a page must not share any. */
  uid: string;
  sync: Sync;
  cleanUp: CleanUp;
}

/** What is painted: the newest scene, and the settings as the controls should show them. */
export interface Shown {
  scene: Scene;
  settings: Settings;
  /** False while the scene lags behind the settings: controls then follow the settings. */
  settled: boolean;
  frame: Float32Array;
}

export interface View {
  root: HTMLElement;
  paint(shown: Shown): void;
}
