import { between, PHASES } from './interpolation.ts';

/** The largest magnitude of a signal, also between its samples. */
export interface TruePeak {
  /** Signed value at the peak, in the unit of the samples. */
  value: number;
  /** Where it is, in samples from index 0 of the record; not a whole number in general. */
  index: number;
}

/** A swing's highest sample may be as low as cos(π/4) of its crest at a quarter of the sampling rate. */
const CANDIDATE = 0.7;

/**
 * Largest magnitude of the band-limited signal through the samples. The highest sample alone reads up to
 * 1 − cos(π f/fs) low: 10.9 % at f/fs = 0.15.
 *
 * Crests whose samples could belong to the largest one are interpolated by a Kaiser-windowed sinc on a grid of 16
 * steps a sample, then by a parabola. A sine up to a quarter of the sampling rate reads within 0.01 %; above that
 * the result still is at least the largest sample but may read low. Outside the record the signal is continued by
 * its point reflection; a crest cut by the end of the range counts by its samples only.
 *
 * @param x the record; values that are not numbers are passed over
 * @param from first index of the range searched
 * @param to one past the last; interpolation may use samples outside the range
 * @returns signed value and place; value 0 at `from` where all samples are zero
 * @throws RangeError where the range is empty or outside the record
 * @example truePeak(Float64Array.from({ length: 99 }, (_, i) => Math.cos((i - 49.5) * 0.9) / Math.cosh((i - 49.5) / 9)), 30, 70) // { value: 1.0000, index: 49.50 }
 */
export function truePeak(x: Float64Array, from = 0, to: number = x.length): TruePeak {
  if (!(from >= 0 && from < to && to <= x.length)) {
    throw new RangeError(`range ${from} to ${to} is empty or outside a record of ${x.length} samples`);
  }
  let highest = 0;
  let at = from;
  for (let i = from; i < to; i++) {
    const magnitude = Math.abs(x[i]!);
    if (magnitude > highest) {
      highest = magnitude;
      at = i;
    }
  }
  let best: TruePeak = { value: x[at]! * (highest > 0 ? 1 : 0), index: at };
  if (highest === 0) return { value: 0, index: from };
  const lowest = CANDIDATE * highest;
  best = better(best, crest(x, at, from, to));
  for (let i = from + 1; i < to - 1; i++) {
    const v = x[i]!;
    const sign = v < 0 ? -1 : 1;
    const b = sign * v;
    if (b < lowest) continue;
    const a = sign * x[i - 1]!;
    const c = sign * x[i + 1]!;
    if (!(b >= a && b > c) || i === at) continue;
    if (mayExceed(a, b, c, Math.abs(best.value))) best = better(best, crest(x, i, from, to));
  }
  return best;
}

/**
 * Twice the rise that a parabola through three samples shows bounds the rise of a sine up to a quarter of the
 * sampling rate: there the parabola shows 0.177 of 0.293.
 */
function mayExceed(a: number, b: number, c: number, best: number): boolean {
  const rise = (0.125 * (a - c) * (a - c)) / (2 * b - a - c);
  return b + 2 * rise > best;
}

function better(one: TruePeak, other: TruePeak): TruePeak {
  return Math.abs(other.value) > Math.abs(one.value) ? other : one;
}

/** Top of the crest around sample i: climb on the grid, then a parabola through the three highest points. */
function crest(x: Float64Array, i: number, from: number, to: number): TruePeak {
  const sample: TruePeak = { value: x[i]!, index: i };
  if (i <= from || i >= to - 1) return sample;
  const sign = sample.value < 0 ? -1 : 1;
  const first = (i - 1) * PHASES;
  const last = (i + 1) * PHASES;
  let g = i * PHASES + startPhase(sign * x[i - 1]!, sign * sample.value, sign * x[i + 1]!);
  let b = sign * between(x, g);
  let a = sign * between(x, g - 1);
  let c = sign * between(x, g + 1);
  while (a > b && g > first) {
    g--;
    c = b;
    b = a;
    a = sign * between(x, g - 1);
  }
  while (c > b && g < last) {
    g++;
    a = b;
    b = c;
    c = sign * between(x, g + 1);
  }
  const bend = a - 2 * b + c;
  if (!(bend < 0 && b >= a && b >= c)) return sample;
  const shift = (0.5 * (a - c)) / bend;
  return { value: sign * (b - 0.25 * (a - c) * shift), index: (g + shift) / PHASES };
}

function startPhase(a: number, b: number, c: number): number {
  const bend = a - 2 * b + c;
  return bend < 0 ? Math.round(((0.5 * (a - c)) / bend) * PHASES) : 0;
}
