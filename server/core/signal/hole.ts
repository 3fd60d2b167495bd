import { factorise, solveInto } from './positive-definite.ts';

/** The longest row of missing samples that is filled in; a longer one hides too much. */
export const HOLE_MOST = 2;
/** Neighbours on each side that a filled sample is computed from. */
const REACH = 8;
/** What the signal is taken to hold: a flat spectrum up to this share of the rate, and so much noise power beside it. */
const BAND = 0.25;
const NOISE = 1e-3;

/**
 * Fills a short hole in place by the least-squares estimate from eight neighbours on each side (Wiener's, for a flat
 * spectrum up to a quarter of the rate and white noise of −30 dB). Of a sine up to a fifth of the rate it is within 1 %
 * of the amplitude for one sample and 4 % for two (worst case of the same weights, computed with NumPy). What lies above
 * a quarter cannot be guessed and leaves an error of its own size.
 * Beside the ends of the record, or other holes, a straight line is all there is.
 *
 * @param x the record
 * @param present 1 where a sample is there
 * @param at first missing sample
 * @param count 1 to `HOLE_MOST`
 * @example fillHole(Float64Array.of(1, 0, 3), Uint8Array.of(1, 0, 1), 1, 1) // x is 1, 2, 3: too short for more than a line
 */
export function fillHole(x: Float64Array, present: Uint8Array, at: number, count: number): void {
  const places = Array.from({ length: 2 * REACH }, (_, k) => (k < REACH ? at - REACH + k : at + count + k - REACH));
  if (places.some((place) => present[place] !== 1)) {
    fillStraight(x, at, count);
    return;
  }
  for (let h = 0; h < count; h++) {
    let sum = 0;
    for (let k = 0; k < 2 * REACH; k++) sum += WEIGHTS[count]![h]![k]! * x[places[k]!]!;
    x[at + h] = sum;
  }
}

/** A straight line from the sample before to the sample after; flat where one of them is missing. */
export function fillStraight(x: Float64Array, at: number, count: number): void {
  const before = x[at - 1] ?? x[at + count] ?? 0;
  const after = x[at + count] ?? before;
  for (let h = 0; h < count; h++) x[at + h] = before + ((after - before) * (h + 1)) / (count + 1);
}

/** By length of the hole, by place in it: a weight for each neighbour. They sum to 1, so that an offset is kept. */
const WEIGHTS: readonly (readonly Float64Array[])[] = Array.from({ length: HOLE_MOST + 1 }, (_, count) =>
  Array.from({ length: count }, (_unused, h) => weightsOf(count, h)),
);

function weightsOf(count: number, hole: number): Float64Array {
  const places = Array.from({ length: 2 * REACH }, (_, k) => (k < REACH ? k - REACH : count + k - REACH));
  const likeness = (lag: number): number =>
    lag === 0 ? 1 : Math.sin(2 * Math.PI * BAND * lag) / (2 * Math.PI * BAND * lag);
  const size = places.length;
  const matrix = new Float64Array(size * size);
  places.forEach((a, i) => places.forEach((b, j) => (matrix[i * size + j] = likeness(a - b) + (i === j ? NOISE : 0))));
  const weights = Float64Array.from(places, (place) => likeness(place - hole));
  solveInto(factorise(matrix, size)!, weights);
  const sum = weights.reduce((total, weight) => total + weight, 0);
  return weights.map((weight) => weight / sum);
}
