import { createRealTransform, type RealTransform } from './fourier.ts';
import { hann } from './window.ts';

/** How records are cut and weighted before averaging. */
export interface WelchOptions {
  /** Samples in a segment: a power of two from 4. */
  segment: number;
  /** Samples that neighbours share, 0 to segment − 1. Default half a segment. */
  overlap?: number;
  /** `segment` factors. Default the periodic Hann window. */
  window?: Float64Array;
  /** Whether each segment's mean is taken away first. Default 'constant'. */
  detrend?: 'constant' | 'none';
}

/** One-sided density: psd[k] at k × stepHz, from 0 Hz to half the rate. */
export interface Density {
  stepHz: number;
  /** Unit of the samples squared, per Hz. Its sum times stepHz is the mean square. */
  psd: Float64Array;
  /** Segments averaged. */
  segments: number;
}

/**
 * Power spectral density by averaged periodograms (Welch 1967), scaled as scipy.signal.welch: a sine of amplitude A
 * gives A²/2 in the sum times stepHz.
 *
 * @param x samples, at least one segment; what does not fill a last segment is left out
 * @param rateHz samples per second
 * @throws RangeError where the record is shorter than a segment, or an option outside its range
 * @example
 * const x = Float64Array.from({ length: 1024 }, (_, i) => 2 * Math.sin((2 * Math.PI * 10 * i) / 128));
 * welch(x, 128, { segment: 256 }).psd[20] // 2.6666667 at 10 Hz
 */
export function welch(x: Float64Array, rateHz: number, options: WelchOptions): Density {
  const spectrum = createSpectrum(rateHz, options);
  addSamples(spectrum, x, 0, x.length);
  const line = takeLine(spectrum);
  if (line === null) throw new RangeError(`${x.length} samples do not fill a segment of ${options.segment}`);
  return line;
}

/**
 * Averaged cross-spectral density of two records: conj(X) Y, scaled as `welch`, one-sided; as scipy.signal.csd.
 *
 * @throws RangeError as `welch`, and where the records differ in length
 * @example crossSpectrum(x, x, 128, { segment: 256 }).re // equal to welch(x, 128, { segment: 256 }).psd
 */
export function crossSpectrum(
  x: Float64Array,
  y: Float64Array,
  rateHz: number,
  options: WelchOptions,
): { stepHz: number; re: Float64Array; im: Float64Array } {
  const { xy, stepHz } = jointDensities(x, y, rateHz, options);
  return { stepHz, ...xy };
}

/**
 * Magnitude-squared coherence |Pxy|² / (Pxx Pyy) of two records: how far one is a linear image of the other. With
 * one segment it is 1 by definition; lines on which either record has no power give 0.
 *
 * @returns 0 to 1 for each line
 * @throws RangeError as `crossSpectrum`
 * @example coherence(x, x.map((v) => 3 * v), 128, { segment: 256 }).coherence[20] // 1
 */
export function coherence(
  x: Float64Array,
  y: Float64Array,
  rateHz: number,
  options: WelchOptions,
): { stepHz: number; coherence: Float64Array } {
  const { xx, yy, xy, stepHz } = jointDensities(x, y, rateHz, options);
  const result = xx.map((power, k) => {
    const product = power * yy[k]!;
    return product > 0 ? (xy.re[k]! ** 2 + xy.im[k]! ** 2) / product : 0;
  });
  return { stepHz, coherence: result };
}

/** A spectrum that grows as samples come in. Plain data: it can be cloned and stored. */
export interface Spectrum {
  rateHz: number;
  hop: number;
  window: Float64Array;
  detrend: boolean;
  /** Newest samples that have not filled a segment yet. */
  waiting: Float64Array;
  filled: number;
  /** Sum of the segments' densities. */
  sum: Float64Array;
  segments: number;
}

/**
 * Begins a spectrum for samples that come in blocks. Any split into blocks gives the same bits.
 *
 * @throws RangeError where an option is outside its range
 * @example
 * const spectrum = createSpectrum(500, { segment: 1024 });
 * addSamples(spectrum, block, 0, block.length); // … and more of them
 * const line = takeLine(spectrum); // since the last line; null while no segment was filled
 */
export function createSpectrum(rateHz: number, options: WelchOptions): Spectrum {
  const { segment, overlap = Math.floor(segment / 2), window = hann(segment), detrend = 'constant' } = options;
  transformOf(segment);
  if (!(Number.isInteger(overlap) && overlap >= 0 && overlap < segment)) {
    throw new RangeError(`an overlap of ${overlap} in segments of ${segment} samples`);
  }
  if (window.length !== segment) throw new RangeError(`a window of ${window.length} for segments of ${segment}`);
  return {
    rateHz,
    hop: segment - overlap,
    window,
    detrend: detrend === 'constant',
    waiting: new Float64Array(segment),
    filled: 0,
    sum: new Float64Array(segment / 2 + 1),
    segments: 0,
  };
}

/** Takes in `x[from..to)`. */
export function addSamples(spectrum: Spectrum, x: Float64Array, from: number, to: number): void {
  const { waiting, hop } = spectrum;
  const size = waiting.length;
  let i = from;
  while (i < to) {
    const count = Math.min(size - spectrum.filled, to - i);
    waiting.set(x.subarray(i, i + count), spectrum.filled);
    spectrum.filled += count;
    i += count;
    if (spectrum.filled === size) {
      addSegment(spectrum);
      waiting.copyWithin(0, hop);
      spectrum.filled = size - hop;
    }
  }
}

/**
 * The density averaged since the last call, and a new beginning: samples that wait for their segment to fill are
 * kept for the next line. Null where no segment was filled.
 */
export function takeLine(spectrum: Spectrum): Density | null {
  const { sum, segments, rateHz, window } = spectrum;
  if (segments === 0) return null;
  const psd = oneSided(sum, rateHz, window, segments);
  sum.fill(0);
  spectrum.segments = 0;
  return { stepHz: rateHz / window.length, psd, segments };
}

/** Drops what was gathered and what waits: after a gap a new stretch begins. */
export function restartSpectrum(spectrum: Spectrum): void {
  spectrum.filled = 0;
}

function addSegment(spectrum: Spectrum): void {
  const { waiting, window, sum } = spectrum;
  const work = workOf(waiting.length);
  load(work.record, waiting, 0, window, spectrum.detrend);
  work.transform.forward(work.record, work.re, work.im);
  const { re, im } = work;
  for (let k = 0; k < sum.length; k++) sum[k]! += re[k]! * re[k]! + im[k]! * im[k]!;
  spectrum.segments++;
}

interface Joint {
  stepHz: number;
  xx: Float64Array;
  yy: Float64Array;
  xy: { re: Float64Array; im: Float64Array };
}

function jointDensities(x: Float64Array, y: Float64Array, rateHz: number, options: WelchOptions): Joint {
  if (x.length !== y.length) throw new RangeError(`records of ${x.length} and ${y.length} samples`);
  const { window, hop, detrend } = createSpectrum(rateHz, options);
  const size = window.length;
  const lines = size / 2 + 1;
  const { transform, record, re, im } = workOf(size);
  const otherRe = new Float64Array(lines);
  const otherIm = new Float64Array(lines);
  const [xx, yy, crossRe, crossIm] = [0, 1, 2, 3].map(() => new Float64Array(lines)) as [
    Float64Array,
    Float64Array,
    Float64Array,
    Float64Array,
  ];
  let segments = 0;
  for (let at = 0; at + size <= x.length; at += hop) {
    load(record, x, at, window, detrend);
    transform.forward(record, re, im);
    load(record, y, at, window, detrend);
    transform.forward(record, otherRe, otherIm);
    for (let k = 0; k < lines; k++) {
      const a = re[k]!;
      const b = im[k]!;
      const c = otherRe[k]!;
      const d = otherIm[k]!;
      xx[k]! += a * a + b * b;
      yy[k]! += c * c + d * d;
      crossRe[k]! += a * c + b * d;
      crossIm[k]! += a * d - b * c;
    }
    segments++;
  }
  if (segments === 0) throw new RangeError(`${x.length} samples do not fill a segment of ${size}`);
  const scaled = (sum: Float64Array): Float64Array => oneSided(sum, rateHz, window, segments);
  return { stepHz: rateHz / size, xx: scaled(xx), yy: scaled(yy), xy: { re: scaled(crossRe), im: scaled(crossIm) } };
}

/** 2 |X|² / (rate Σw²), without the factor 2 on the lines that stand alone. */
function oneSided(sum: Float64Array, rateHz: number, window: Float64Array, segments: number): Float64Array {
  let squares = 0;
  for (const w of window) squares += w * w;
  const scale = 2 / (rateHz * squares * segments);
  const scaled = sum.map((power) => power * scale);
  scaled[0]! /= 2;
  scaled[scaled.length - 1]! /= 2;
  return scaled;
}

function load(record: Float64Array, x: Float64Array, at: number, window: Float64Array, detrend: boolean): void {
  const n = record.length;
  let mean = 0;
  if (detrend) {
    for (let i = 0; i < n; i++) mean += x[at + i]!;
    mean /= n;
  }
  for (let i = 0; i < n; i++) record[i] = (x[at + i]! - mean) * window[i]!;
}

interface Work {
  transform: RealTransform;
  record: Float64Array;
  re: Float64Array;
  im: Float64Array;
}

/** Tables and work space for each size that was used; they hold no state between calls. */
const WORK = new Map<number, Work>();

function workOf(size: number): Work {
  let work = WORK.get(size);
  if (work === undefined) {
    work = {
      transform: createRealTransform(size),
      record: new Float64Array(size),
      re: new Float64Array(size / 2 + 1),
      im: new Float64Array(size / 2 + 1),
    };
    WORK.set(size, work);
  }
  return work;
}

function transformOf(size: number): RealTransform {
  return workOf(size).transform;
}
