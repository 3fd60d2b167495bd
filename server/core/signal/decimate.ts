import { kaiser } from './kaiser.ts';

/** A record with fewer samples a second, and the filter it went through. */
export interface Decimated {
  /** Sample m is the sum of taps[j] × x[m × factor + j]: it looks forwards only. */
  samples: Float64Array;
  factor: number;
  taps: Float64Array;
}

/** Kaiser's design for −50 dB: taps = 1 + (50 − 8) / (2.285 × width), width in radians a sample. */
const STOP_BAND_DB = 50;
const BETA = 0.1102 * (STOP_BAND_DB - 8.7);

/** Seconds that the filter of `decimate` takes from the end of a record. */
export function decimationLoss(passHz: number, rateHz: number, factor: number): number {
  return factor === 1 ? 0 : (tapsFor(passHz, rateHz, factor) - 1) / rateHz;
}

/**
 * Keeps every `factor`-th sample of a low-passed record. What lies below `passHz` stays free of aliases (−50 dB).
 *
 * The filter has a finite response and only whole overlaps are kept, so a sum of exponentials stays exactly a sum
 * of the same exponentials, from the first sample on: what decay identification needs. The end of the record is
 * shortened by the length of the filter.
 *
 * @param x samples
 * @param factor whole number from 1; 1 returns the record as it is
 * @param passHz below half of the new rate
 * @param rateHz samples per second of `x`
 */
export function decimate(x: Float64Array, factor: number, passHz: number, rateHz: number): Decimated {
  if (factor === 1) return { samples: x, factor, taps: Float64Array.of(1) };
  const taps = lowpassTaps(tapsFor(passHz, rateHz, factor), 0.5 / factor);
  const count = Math.max(0, Math.floor((x.length - taps.length) / factor) + 1);
  const samples = new Float64Array(count);
  for (let m = 0; m < count; m++) {
    const begin = m * factor;
    let sum = 0;
    for (let j = 0; j < taps.length; j++) sum += taps[j]! * x[begin + j]!;
    samples[m] = sum;
  }
  return { samples, factor, taps };
}

function tapsFor(passHz: number, rateHz: number, factor: number): number {
  const width = (2 * Math.PI * (rateHz / factor - 2 * passHz)) / rateHz;
  if (!(width > 0)) throw new RangeError(`pass band of ${passHz} Hz does not fit ${rateHz / factor} samples a second`);
  return 2 * Math.ceil((STOP_BAND_DB - 8) / (2 * 2.285 * width)) + 1;
}

/** Kaiser-windowed sinc of gain 1 at 0 Hz; the edge is in cycles a sample. */
function lowpassTaps(count: number, edge: number): Float64Array {
  const taps = new Float64Array(count);
  const middle = (count - 1) / 2;
  let sum = 0;
  for (let j = 0; j < count; j++) {
    const t = j - middle;
    const sinc = t === 0 ? 2 * edge : Math.sin(2 * Math.PI * edge * t) / (Math.PI * t);
    taps[j] = sinc * kaiser(t / middle, BETA);
    sum += taps[j]!;
  }
  for (let j = 0; j < count; j++) taps[j]! /= sum;
  return taps;
}
