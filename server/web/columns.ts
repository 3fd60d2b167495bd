import { COLUMN_MICROS } from '#core/contract/live.ts';
import { MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';

/** The ladder of column widths: the finest that viewers may ask for, and its doublings. All are nested. */
const FINEST = COLUMN_MICROS[0];

/**
 * The narrowest rung of the ladder that is at least `askedMicros` and one sample wide, so that an unbroken channel never
 * has an empty column.
 *
 * @example columnStep(20_000, 500) // 20_000
 * @example columnStep(5_000, 100) // 10_000
 */
export function columnStep(askedMicros: number, rateHz: number): number {
  let step: number = FINEST;
  while (step < askedMicros || step < MICROS_PER_SECOND / rateHz) step *= 2;
  return step;
}

/**
 * A ring of finished min/max columns on multiples of `stepMicros`. Columns are named by their number, time / step.
 * Holes are NaN.
 */
export interface Ring {
  readonly stepMicros: number;
  readonly capacity: number;
  /** Pairs min, max at 2 × (number mod capacity). */
  readonly pairs: Float32Array;
  /** One past the newest finished column, and the oldest one held. */
  end: number;
  start: number;
}

export function createRing(stepMicros: number, seconds: number): Ring {
  const capacity = Math.max(2, Math.ceil((seconds * MICROS_PER_SECOND) / stepMicros));
  return { stepMicros, capacity, pairs: new Float32Array(2 * capacity), end: 0, start: 0 };
}

/** Appends a finished column; columns between it and the one before are a hole. One that is not newer is left out. */
export function appendColumn(ring: Ring, number: number, min: number, max: number): void {
  if (number < ring.end && ring.start !== ring.end) return;
  if (ring.start === ring.end || number - ring.end >= ring.capacity) ring.start = ring.end = number;
  for (let hole = ring.end; hole < number; hole++) put(ring, hole, NaN, NaN);
  put(ring, number, min, max);
  ring.end = number + 1;
  ring.start = Math.max(ring.start, ring.end - ring.capacity);
}

function put(ring: Ring, number: number, min: number, max: number): void {
  const at = 2 * (number % ring.capacity);
  ring.pairs[at] = min;
  ring.pairs[at + 1] = max;
}

/**
 * Writes columns of a wider (or the same) step into `target` as pairs.
 *
 * @param from first column in units of `stepMicros`; parts that the ring no longer holds are NaN
 * @param to one past the last
 * @param at where in `target`, in floats
 */
export function mergeColumns(
  ring: Ring,
  stepMicros: number,
  from: number,
  to: number,
  target: Float32Array,
  at: number,
): void {
  const factor = stepMicros / ring.stepMicros;
  for (let number = from; number < to; number++) {
    let min = Infinity;
    let max = -Infinity;
    const last = Math.min((number + 1) * factor, ring.end);
    for (let column = Math.max(number * factor, ring.start); column < last; column++) {
      const slot = 2 * (column % ring.capacity);
      const low = ring.pairs[slot]!;
      const high = ring.pairs[slot + 1]!;
      // NaN fails both comparisons.
      if (low < min) min = low;
      if (high > max) max = high;
    }
    target[at] = min === Infinity ? NaN : min;
    target[at + 1] = max === -Infinity ? NaN : max;
    at += 2;
  }
}

/** The column that samples are being gathered into. */
export interface Gathering {
  number: number;
  min: number;
  max: number;
}

export const createGathering = (): Gathering => ({ number: -1, min: Infinity, max: -Infinity });

/**
 * Takes evenly spaced samples, each once, and hands on the columns they finish. Samples older than the column in hand
 * are left out: the live picture does not go back.
 */
export function gather(
  gathering: Gathering,
  stepMicros: number,
  startMicros: Micros,
  rateHz: number,
  samples: Float32Array,
  finished: (number: number, min: number, max: number) => void,
): void {
  let { number, min, max } = gathering;
  let index = 0;
  while (index < samples.length) {
    const mine = Math.floor(sampleMicros(startMicros, index, rateHz) / stepMicros);
    const end = firstAfter((mine + 1) * stepMicros, index, startMicros, rateHz, samples.length);
    if (mine < number) {
      index = end;
      continue;
    }
    if (mine > number) {
      if (min <= max) finished(number, min, max);
      number = mine;
      min = Infinity;
      max = -Infinity;
    }
    for (; index < end; index++) {
      const value = samples[index]!;
      if (value < min) min = value;
      if (value > max) max = value;
    }
  }
  // A slow channel has at most one sample a column: nothing is left to wait for, and the newest value is shown at once.
  if (rateHz * stepMicros <= MICROS_PER_SECOND && min <= max) {
    finished(number, min, max);
    min = Infinity;
    max = -Infinity;
  }
  gathering.number = number;
  gathering.min = min;
  gathering.max = max;
}

/** First index after `index` whose sample is not before `micros`. */
function firstAfter(micros: Micros, index: number, startMicros: Micros, rateHz: number, length: number): number {
  let end = Math.max(index + 1, Math.floor(((micros - startMicros) * rateHz) / MICROS_PER_SECOND) - 1);
  while (end < length && sampleMicros(startMicros, end, rateHz) < micros) end += 1;
  return Math.min(end, length);
}
