import type { MarkShape } from "../schema/scene";

const round = (value: number): number => Math.round(value * 100) / 100;

/** The outline of a mark about (x, y); filled shapes have about the same area at the same radius. */
export function markPath(shape: MarkShape, x: number, y: number, r: number): string {
  const at = (dx: number, dy: number): string => `${round(x + dx * r)} ${round(y + dy * r)}`;
  switch (shape) {
    case "triangle": return `M${at(0, -1.25)}L${at(1.19, 0.88)}L${at(-1.19, 0.88)}Z`;
    case "down": return `M${at(0, 1.25)}L${at(-1.19, -0.88)}L${at(1.19, -0.88)}Z`;
    case "square": return `M${at(-0.9, -0.9)}L${at(0.9, -0.9)}L${at(0.9, 0.9)}L${at(-0.9, 0.9)}Z`;
    case "diamond": return `M${at(0, -1.25)}L${at(1.25, 0)}L${at(0, 1.25)}L${at(-1.25, 0)}Z`;
    case "plus": return `M${at(-0.4, -1.15)}L${at(0.4, -1.15)}L${at(0.4, -0.4)}L${at(1.15, -0.4)}`
      + `L${at(1.15, 0.4)}L${at(0.4, 0.4)}L${at(0.4, 1.15)}L${at(-0.4, 1.15)}L${at(-0.4, 0.4)}`
      + `L${at(-1.15, 0.4)}L${at(-1.15, -0.4)}L${at(-0.4, -0.4)}Z`;
    case "cross": return `M${at(-1, 0)}L${at(1, 0)}M${at(0, -1)}L${at(0, 1)}`;
    case "x": return `M${at(-1, -1)}L${at(1, 1)}M${at(1, -1)}L${at(-1, 1)}`;
    case "circle": {
      const [d, a] = [round(2 * r), round(r)];
      return `M${at(-1, 0)}a${a} ${a} 0 1 0 ${d} 0a${a} ${a} 0 1 0 ${-d} 0Z`;
    }
  }
}
