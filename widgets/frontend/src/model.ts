import type { Scene, Settings } from "./schema/scene";

/** The traits of the one anywidget model, as far as the browser uses them. */
export interface Traits {
  settings: Settings;
  scene: Scene;
  frame: DataView;
}

/** What anywidget hands to `render`. */
export interface Model {
  get<K extends keyof Traits>(name: K): Traits[K] | null | undefined;
  set<K extends keyof Traits>(name: K, value: Traits[K]): void;
  save_changes(): void;
  on(event: string, callback: () => void): void;
  off(event: string, callback: () => void): void;
}

/** The frame as float32 numbers; copied only where the buffer is not aligned. */
export function floats(view: DataView | null | undefined): Float32Array {
  if (!view || view.byteLength === 0) return new Float32Array(0);
  const count = view.byteLength >> 2;
  if (view.byteOffset % 4 === 0) return new Float32Array(view.buffer, view.byteOffset, count);
  return new Float32Array(view.buffer.slice(view.byteOffset, view.byteOffset + count * 4));
}
