/** Axles in the order of the train; distances behind the first one, m, rising. */

/** First and last axle of a bogie, or one axle by itself twice. */
export interface Bogie {
  first: number;
  last: number;
}

/** A vehicle from its front to its rear, m behind the first axle, as far as the axle pattern tells. */
export interface Vehicle {
  fromM: number;
  toM: number;
}

/** Longest distance of neighbouring axles in one bogie, m. */
const BOGIE_GAP_M = 3.3;

/**
 * Axles that run in one bogie: near to each other, and nearer than to the axle beyond.
 *
 * @example bogiesOf([0, 2.5, 19, 21.5]) // [{ first: 0, last: 1 }, { first: 2, last: 3 }]
 */
export function bogiesOf(behindM: readonly number[]): Bogie[] {
  const gaps = behindM.slice(1).map((at, i) => at - behindM[i]!);
  const joined = gaps.map((gap, i) => {
    const beside = [gaps[i - 1], gaps[i + 1]].filter((other) => other !== undefined);
    if (gap > BOGIE_GAP_M) return false;
    if (beside.length === 0) return true;
    return gap <= 0.8 * Math.max(...beside) || gap <= 1.1 * Math.min(...beside);
  });
  const bogies: Bogie[] = [];
  let first = 0;
  for (let i = 0; i < behindM.length; i++) {
    if (joined[i]) continue;
    bogies.push({ first, last: i });
    first = i + 1;
  }
  return bogies;
}

/** A coach's end reaches this far beyond its bogie where no neighbour tells, at the most, m. */
const LONGEST_OVERHANG_M = 3.6;
const COUPLING_M = 0.35;

/**
 * Vehicles as pairs of bogies, where the pattern tells them: the distance between the bogies of a vehicle must be
 * clearly longer than that between vehicles. Otherwise none: axles are known, outlines would be guessed.
 */
export function vehiclesOf(behindM: readonly number[], bogies: readonly Bogie[]): Vehicle[] {
  const pairs = Math.floor(bogies.length / 2);
  const gapAfter = (bogie: number): number => behindM[bogies[bogie + 1]!.first]! - behindM[bogies[bogie]!.last]!;
  const inside = Array.from({ length: pairs }, (_, k) => gapAfter(2 * k));
  const across = Array.from({ length: Math.floor((bogies.length - 1) / 2) }, (_, k) => gapAfter(2 * k + 1));
  if (pairs === 0 || Math.min(...inside) < 1.15 * Math.max(...across, 0)) return [];
  return Array.from({ length: pairs }, (_, k) => {
    const before = across[k - 1];
    const after = across[k];
    const front = before === undefined ? endOf(after) : before / 2 - COUPLING_M;
    const rear = after === undefined ? endOf(before) : after / 2 - COUPLING_M;
    return {
      fromM: behindM[bogies[2 * k]!.first]! - front,
      toM: behindM[bogies[2 * k + 1]!.last]! + rear,
    };
  });
}

const endOf = (acrossM: number | undefined): number =>
  Math.min(LONGEST_OVERHANG_M, acrossM === undefined ? 2.4 : acrossM / 2 - COUPLING_M);
