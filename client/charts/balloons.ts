/** A label that wants to stand at a place. */
export interface Wish {
  at: number;
  /** Half of the room it takes, with its share of the gap. */
  half: number;
}

/**
 * Places labels in a row so that none overlaps, their order is kept, and the sum of squared shifts is least.
 * Isotonic regression by pooling adjacent violators (Ayer et al. 1955), which is exact for this problem.
 *
 * @param wishes in any order, px
 * @returns places in the order given, px
 * @example spread([{ at: 10, half: 5 }, { at: 10, half: 5 }]) // [5, 15]
 */
export function spread(wishes: readonly Wish[]): number[] {
  const order = wishes.map((_, i) => i).sort((a, b) => wishes[a]!.at - wishes[b]!.at || a - b);
  // Shifted by the room of all before it, the wish "no overlap" becomes "not falling".
  const offsets: number[] = [];
  let room = 0;
  order.forEach((index, k) => {
    const { half } = wishes[index]!;
    if (k > 0) room += half;
    offsets.push(room);
    room += half;
  });
  const pools: { sum: number; count: number }[] = [];
  order.forEach((index, k) => {
    pools.push({ sum: wishes[index]!.at - offsets[k]!, count: 1 });
    while (pools.length > 1) {
      const last = pools[pools.length - 1]!;
      const before = pools[pools.length - 2]!;
      if (before.sum / before.count <= last.sum / last.count) break;
      before.sum += last.sum;
      before.count += last.count;
      pools.pop();
    }
  });
  const places = new Array<number>(wishes.length);
  let k = 0;
  for (const { sum, count } of pools) {
    for (let i = 0; i < count; i++, k++) places[order[k]!] = sum / count + offsets[k]!;
  }
  return places;
}

/**
 * As `spread`, then pushed back in where the row would run over an end; over the right one at last where all of it is wider
 * than the room.
 *
 * @param wishes in order, px
 * @param width of the room, px
 * @example spreadWithin([{ at: 2, half: 5 }, { at: 2, half: 5 }], 100) // [5, 15]
 */
export function spreadWithin(wishes: readonly Wish[], width: number): number[] {
  const places = spread(wishes);
  let right = width;
  for (let i = places.length - 1; i >= 0; i--) {
    const { half } = wishes[i]!;
    places[i] = Math.min(places[i]!, right - half);
    right = places[i]! - half;
  }
  let left = 0;
  for (let i = 0; i < places.length; i++) {
    const { half } = wishes[i]!;
    places[i] = Math.max(places[i]!, left + half);
    left = places[i]! + half;
  }
  return places;
}
