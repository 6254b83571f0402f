/**
 * The pick after `row` was put into it: it takes the place of the picked row nearest in row order (the earlier of
 * two equally near), and the pick stays in row order. A row that is already picked changes nothing.
 *
 * @param order row numbers in the order of the table
 */
export function putIntoPick(order: number[], pick: number[], row: number): number[] {
  if (pick.includes(row)) return pick;
  const place = new Map(order.map((number, index) => [number, index]));
  const at = (number: number): number => place.get(number) ?? 0;
  let nearest = pick[0];
  for (const candidate of pick) {
    if (nearest === undefined || Math.abs(at(candidate) - at(row)) < Math.abs(at(nearest) - at(row))) {
      nearest = candidate;
    }
  }
  return pick.map((member) => (member === nearest ? row : member)).sort((a, b) => at(a) - at(b));
}

/** The pick without `row`: the nearest row of the fit outside the pick takes its place, or null if there is none. */
export function dropFromPick(order: number[], usable: Set<number>, pick: number[], row: number): number[] | null {
  const place = order.indexOf(row);
  const spare = order
    .map((number, index) => ({ number, distance: Math.abs(index - place) }))
    .filter(({ number }) => number !== row && usable.has(number) && !pick.includes(number))
    .sort((a, b) => a.distance - b.distance)[0];
  if (!spare) return null;
  return pick
    .map((member) => (member === row ? spare.number : member))
    .sort((a, b) => order.indexOf(a) - order.indexOf(b));
}
