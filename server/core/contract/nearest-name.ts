/**
 * The known name that a mistyped one most likely stands for.
 *
 * @param name as it was written
 * @param known names to choose from
 * @returns the nearest by edit distance, capitals and dashes aside; null where none is within a third of its length
 * @example nearestName('lenght', ['lengthM', 'startM']) // 'lengthM'
 */
export function nearestName(name: string, known: readonly string[]): string | null {
  // Longer than any name of a definition: not a slip of the hand.
  if (name.length > 64) return null;
  let best: string | null = null;
  let bestDistance = Infinity;
  for (const candidate of known) {
    const distance = editDistance(plain(name), plain(candidate));
    const allowed = Math.max(1, Math.floor(Math.max(name.length, candidate.length) / 3));
    if (distance <= allowed && distance < bestDistance) {
      best = candidate;
      bestDistance = distance;
    }
  }
  return best;
}

const plain = (name: string): string => name.toLowerCase().replace(/[-_ ]/g, '');

/** Least number of insertions, deletions, replacements and swaps of neighbours (optimal string alignment). */
function editDistance(a: string, b: string): number {
  const rows = a.length + 1;
  const columns = b.length + 1;
  const cost = new Uint16Array(rows * columns);
  for (let row = 0; row < rows; row++) cost[row * columns] = row;
  for (let column = 0; column < columns; column++) cost[column] = column;
  for (let row = 1; row < rows; row++) {
    for (let column = 1; column < columns; column++) {
      const here = row * columns + column;
      const same = a[row - 1] === b[column - 1] ? 0 : 1;
      let least = Math.min(cost[here - columns]! + 1, cost[here - 1]! + 1, cost[here - columns - 1]! + same);
      if (row > 1 && column > 1 && a[row - 1] === b[column - 2] && a[row - 2] === b[column - 1]) {
        least = Math.min(least, cost[here - 2 * columns - 2]! + 1);
      }
      cost[here] = least;
    }
  }
  return cost[rows * columns - 1]!;
}
