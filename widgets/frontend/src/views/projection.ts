import type { Point } from "../schema/scene";

/** Direction from which the scene is seen, degrees, ICRF. */
export interface ViewDirection { ra_deg: number; dec_deg: number }

/** Orthographic, north up, right-handed: x to the right, y down on the screen, z towards the viewer, in px. */
export interface Projection {
  scale: number;
  point(x: number, y: number, z: number): Point;
}

export function projection(
  view: ViewDirection, scale: number, origin: [number, number], middle: Point,
): Projection {
  const [a, d] = [(view.ra_deg * Math.PI) / 180, (view.dec_deg * Math.PI) / 180];
  const [ca, sa, cd, sd] = [Math.cos(a), Math.sin(a), Math.cos(d), Math.sin(d)];
  // The middle is taken out on the screen only: depth stays counted from the body's centre.
  const right = (x: number, y: number): number => -sa * x + ca * y;
  const up = (x: number, y: number, z: number): number => -sd * ca * x - sd * sa * y + cd * z;
  const [mr, mu] = [right(middle[0], middle[1]), up(...middle)];
  return {
    scale,
    point: (x, y, z) => [
      origin[0] + scale * (right(x, y) - mr),
      origin[1] - scale * (up(x, y, z) - mu),
      scale * (cd * ca * x + cd * sa * y + sd * z),
    ],
  };
}

/**
 * A polyline cut where it passes the plane through the body's centre across the line of sight. What lies behind
 * that plane is painted before the body's disc and so hidden by it; for points outside the body this is exact.
 */
export function cutAtBody(points: Point[]): { front: string; back: string } {
  const paths = { front: "", back: "" };
  let last: Point | null = null;
  let side: "front" | "back" | null = null;
  for (const p of points) {
    if (!Number.isFinite(p[0]) || !Number.isFinite(p[1]) || !Number.isFinite(p[2])) {
      last = side = null;
      continue;
    }
    const next = p[2] >= 0 ? "front" : "back";
    if (side === null || last === null) {
      paths[next] += `M${xy(p)}`;
    } else if (next === side) {
      paths[next] += `L${xy(p)}`;
    } else {
      const f = last[2] / (last[2] - p[2]);
      const cut: Point = [last[0] + f * (p[0] - last[0]), last[1] + f * (p[1] - last[1]), 0];
      paths[side] += `L${xy(cut)}`;
      paths[next] += `M${xy(cut)}L${xy(p)}`;
    }
    last = p;
    side = next;
  }
  return paths;
}

function xy(p: Point): string {
  return `${Math.round(p[0] * 10) / 10} ${Math.round(p[1] * 10) / 10}`;
}

/** "2ʰ32ᵐ" and "+34°": how a view direction is written. */
export function directionText({ ra_deg, dec_deg }: ViewDirection): string {
  const minutes = Math.round((((ra_deg % 360) + 360) % 360) * 4) % 1440;
  const dec = Math.round(dec_deg);
  const sign = dec < 0 ? "−" : "+";
  return `RA ${Math.floor(minutes / 60)}ʰ${String(minutes % 60).padStart(2, "0")}ᵐ, Dec ${sign}${Math.abs(dec)}°`;
}
