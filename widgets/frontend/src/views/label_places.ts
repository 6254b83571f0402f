export interface Label {
  cls: string; text: string;
  /** The point it belongs to and the radius to keep free, px. */
  x: number; y: number; r: number;
}
export interface Placed { cls: string; text: string; x: number; y: number; anchor: "start" | "middle" | "end" }

interface Box { left: number; right: number; top: number; bottom: number }

const HEIGHT = 11;
const DIGIT = 6.6;

function boxOf(place: Placed): Box {
  const width = place.text.length * DIGIT;
  const left = place.x - (place.anchor === "start" ? 0 : place.anchor === "end" ? width : width / 2);
  return { left, right: left + width, top: place.y - HEIGHT + 2, bottom: place.y + 2 };
}

function clear(a: Box, b: Box): boolean {
  return a.right < b.left || b.right < a.left || a.bottom < b.top || b.bottom < a.top;
}

function covered(box: Box, points: ArrayLike<number>[]): number {
  let count = 0;
  for (const point of points) {
    const [x, y] = [point[0] as number, point[1] as number];
    if (x > box.left - 1 && x < box.right + 1 && y > box.top && y < box.bottom) count++;
  }
  return count;
}

/** Where a label stands when seen from its point in direction (ux, uy). */
function placeAt(label: Label, ux: number, uy: number, gap: number): Placed {
  const anchor = ux > 0.38 ? "start" : ux < -0.38 ? "end" : "middle";
  return {
    cls: label.cls, text: label.text, anchor, x: label.x + ux * gap, y: label.y + uy * gap + 4,
  };
}

/**
 * Places labels outward from the middle of the picture, turned aside where they would meet each other or cover
 * lines. Strong ones come first; a label that finds no free place is left out unless it is strong.
 *
 * @param taken boxes that must stay free, such as the scale bar
 * @param busy points of lines and marks, better not covered
 */
export function placeLabels(
  labels: Label[], width: number, height: number, taken: Box[], busy: ArrayLike<number>[],
): Placed[] {
  const strong = (label: Label): boolean => label.cls.split(" ").includes("strong");
  const order = [...labels.filter(strong), ...labels.filter((label) => !strong(label))];
  const boxes = [...taken];
  const placed: Placed[] = [];
  for (const label of order) {
    let [ux, uy] = [label.x - width / 2, label.y - height / 2];
    const length = Math.hypot(ux, uy) || 1;
    [ux, uy] = [ux / length, uy / length];
    let best: Placed | null = null;
    let least = Infinity;
    for (let turn = 0; turn < 16; turn++) {
      const angle = ((turn % 2 ? 1 : -1) * Math.ceil((turn % 8) / 2) * Math.PI) / 4;
      const gap = label.r + (turn < 8 ? 6 : 18);
      const [c, s] = [Math.cos(angle), Math.sin(angle)];
      const place = placeAt(label, ux * c - uy * s, ux * s + uy * c, gap);
      const box = boxOf(place);
      const inside = box.left >= 0 && box.right <= width && box.top >= 0 && box.bottom <= height;
      if (!inside || !boxes.every((other) => clear(box, other))) continue;
      const cost = covered(box, busy) + 0.3 * turn;
      if (cost < least) [best, least] = [place, cost];
    }
    if (!best && strong(label)) best = placeAt(label, ux, uy, label.r + 6);
    if (!best) continue;
    boxes.push(boxOf(best));
    placed.push(best);
  }
  return placed;
}
