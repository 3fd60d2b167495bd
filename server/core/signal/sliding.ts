/**
 * Largest mean square over any `width` consecutive samples. A window that would be longer than the record is the
 * whole record.
 *
 * Sums are never updated by subtraction: each window is a tail of one stretch of `width` samples plus a head of
 * the next (van Herk 1992, for sums of non-negative numbers), so the relative error stays near width × 2⁻⁵³ also
 * behind a spike a thousand million times larger than the rest.
 *
 * @param x samples
 * @param width samples in a window, at least 1
 * @returns mean square in the unit of x squared; 0 for an empty record
 * @throws RangeError where width is not a whole number from 1
 * @example slidingMeanSquareMax(Float64Array.of(0, 3, 4, 0), 2) // 12.5
 */
export function slidingMeanSquareMax(x: Float64Array, width: number): number {
  if (!Number.isInteger(width) || width < 1) throw new RangeError(`width ${width} is not a whole number from 1`);
  const n = x.length;
  const span = Math.min(width, n);
  if (span === 0) return 0;
  const tails = new Float64Array(span + 1);
  let largest = 0;
  for (let begin = 0; begin + span <= n; begin += span) {
    for (let i = span - 1; i >= 0; i--) {
      const v = x[begin + i]!;
      tails[i] = tails[i + 1]! + v * v;
    }
    // windows that begin at begin + i: a tail of this stretch and the first i samples of the next
    let head = 0;
    const last = Math.min(span - 1, n - span - begin);
    for (let i = 0; ; i++) {
      const sum = tails[i]! + head;
      if (sum > largest) largest = sum;
      if (i >= last) break;
      const v = x[begin + span + i]!;
      head += v * v;
    }
  }
  return largest / span;
}

export interface Excursions {
  /** Time with the magnitude above the limit, crossings placed between samples by straight lines. */
  secondsAbove: number;
  /** Runs of samples beyond the limit on one side; a swing from above +limit to below −limit begins another. */
  count: number;
}

/**
 * How long and how often the magnitude of a signal is above a limit.
 *
 * @param x samples at a steady rate, in the unit of `limit`
 * @param limit at least 0; a value equal to the limit is not above it
 * @param rateHz samples per second
 * @returns seconds and number of excursions; an excursion that is cut by the end of the record counts
 * @example excursions(Float64Array.of(0, 2, 0, -2, 0), 1, 1) // { secondsAbove: 2, count: 2 }
 */
export function excursions(x: Float64Array, limit: number, rateHz: number): Excursions {
  let steps = 0;
  let count = 0;
  let sideBefore = 0;
  let before = 0;
  for (let i = 0; i < x.length; i++) {
    const v = x[i]!;
    const side = v > limit ? 1 : v < -limit ? -1 : 0;
    if (side !== 0 && side !== sideBefore) count++;
    if (i > 0 && (side !== 0 || sideBefore !== 0)) {
      steps += partBeyond(before, v, limit) + partBeyond(-before, -v, limit);
    }
    sideBefore = side;
    before = v;
  }
  return { secondsAbove: steps / rateHz, count };
}

/** Part of the straight line from a to b that lies above the limit, 0 to 1. */
function partBeyond(a: number, b: number, limit: number): number {
  const high = Math.max(a, b) - limit;
  if (!(high > 0)) return 0;
  const low = Math.min(a, b) - limit;
  return low >= 0 ? 1 : high / (high - low);
}
