import type { SpectrumLine } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { createRealTransform, type RealTransform } from '../signal/fourier.ts';
import { hann } from '../signal/window.ts';

/**
 * A spectrum a minute of one channel: Welch's mean over half-overlapping Hann segments of about four seconds, minutes
 * on the clock of event time. Plain data; tables of the transform are kept outside, since they depend on its size alone.
 */
export interface RollingSpectrum {
  rateHz: number;
  segment: Float64Array;
  filled: number;
  sum: Float64Array;
  segments: number;
  minute: number;
}

/** Most bins that are kept of a line, from 0 Hz up. */
export const SPECTRUM_BINS_MOST = 512;

const SEGMENT_SECONDS = 4;
const MINUTE_MICROS = 60 * MICROS_PER_SECOND;

export function createRollingSpectrum(rateHz: number): RollingSpectrum {
  const size = 2 ** Math.round(Math.log2(SEGMENT_SECONDS * rateHz));
  const bins = Math.min(size / 2 + 1, SPECTRUM_BINS_MOST);
  return { rateHz, segment: new Float64Array(size), filled: 0, sum: new Float64Array(bins), segments: 0, minute: -1 };
}

/** Takes samples in order; tells a line whenever a minute is over and at least one segment was whole. */
export function rollSpectrum(
  spectrum: RollingSpectrum,
  x: Float64Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  afterGap: boolean,
  tell: (line: Omit<SpectrumLine, 'bridge' | 'sensor'>) => void,
): void {
  if (afterGap) spectrum.filled = 0;
  let at = from;
  while (at < to) {
    const minute = Math.floor(microsAt(at) / MINUTE_MICROS);
    if (minute !== spectrum.minute) {
      if (spectrum.segments > 0) tell(lineOf(spectrum));
      spectrum.minute = minute;
    }
    const left = Math.ceil((((minute + 1) * MINUTE_MICROS - microsAt(at)) * spectrum.rateHz) / MICROS_PER_SECOND);
    const count = Math.min(to - at, spectrum.segment.length - spectrum.filled, Math.max(1, left));
    spectrum.segment.set(x.subarray(at, at + count), spectrum.filled);
    spectrum.filled += count;
    at += count;
    if (spectrum.filled === spectrum.segment.length) addSegment(spectrum);
  }
}

function addSegment(spectrum: RollingSpectrum): void {
  const { segment, sum } = spectrum;
  const { transform, window, work, re, im } = tablesOf(segment.length);
  for (let i = 0; i < segment.length; i++) work[i] = segment[i]! * window[i]!;
  transform.forward(work, re, im);
  for (let k = 0; k < sum.length; k++) sum[k]! += re[k]! * re[k]! + im[k]! * im[k]!;
  spectrum.segments += 1;
  segment.copyWithin(0, segment.length / 2);
  spectrum.filled = segment.length / 2;
}

function lineOf(spectrum: RollingSpectrum): Omit<SpectrumLine, 'bridge' | 'sensor'> {
  const { sum, rateHz, segment, segments } = spectrum;
  const size = segment.length;
  // One-sided: 2 |X|² / (fs Σw²), not doubled at 0 Hz and the Nyquist frequency; Σw² of the periodic Hann is 3/8 N.
  const scale = 1 / (rateHz * size * 0.375 * segments);
  const psd = Float32Array.from(sum, (power, k) => power * scale * (k === 0 || k === size / 2 ? 1 : 2));
  sum.fill(0);
  spectrum.segments = 0;
  return { micros: (spectrum.minute + 1) * MINUTE_MICROS, stepHz: rateHz / size, psd };
}

interface Tables {
  transform: RealTransform;
  window: Float64Array;
  work: Float64Array;
  re: Float64Array;
  im: Float64Array;
}

/** One set a size: there are as many sizes as there are rates on a bridge, a handful. */
const tables = new Map<number, Tables>();

function tablesOf(size: number): Tables {
  let found = tables.get(size);
  if (found === undefined) {
    found = {
      transform: createRealTransform(size),
      window: hann(size, 'periodic'),
      work: new Float64Array(size),
      re: new Float64Array(size / 2 + 1),
      im: new Float64Array(size / 2 + 1),
    };
    tables.set(size, found);
  }
  return found;
}
