import { createRealTransform, powerOfTwoFrom } from './fourier.ts';

export interface Delay {
  /** How much later the second record is, seconds; negative where it is earlier. */
  seconds: number;
  /** Standard error for white noise in either record, seconds. */
  standardError: number;
  /** Correlation of the records at this delay, 0 to 1. */
  correlation: number;
}

export interface DelayOptions {
  /** Delays looked at, seconds: from the first to the second. Default as long as the records, either way. */
  betweenS?: readonly [number, number];
  /** Frequencies used, Hz. Default all. Leaving out those that hold only noise makes the delay much more certain. */
  bandHz?: readonly [number, number];
}

/**
 * Delay between two records of the same motion, finer than a sample: the maximum of the cross-correlation of their
 * band-limited signals, found on the samples and then by Newton's method on its Fourier sum.
 *
 * The standard error is that of a least-squares fit of one record to the other (Quazi 1981):
 * √((1 − ρ²) / (ρ² 2BT β²)), with B the width of the band, T the length of the records and β² the mean square
 * angular frequency of what they have in common.
 *
 * @param x first record; its base line must be zero
 * @param y second record, as long as the first
 * @param rateHz samples per second
 * @returns null where a record is zero or shorter than 4 samples, or no delay in the range is a positive maximum
 * @throws RangeError where the records differ in length
 * @example
 * const pulse = (at: number) => Float64Array.from({ length: 200 }, (_, i) => Math.exp(-(((i - at) / 6) ** 2)));
 * delayBetween(pulse(80), pulse(93.7), 100)?.seconds // 0.137
 */
export function delayBetween(
  x: Float64Array,
  y: Float64Array,
  rateHz: number,
  options: DelayOptions = {},
): Delay | null {
  const n = x.length;
  if (y.length !== n) throw new RangeError(`records of ${n} and ${y.length} samples`);
  if (n < 4) return null;
  const band = options.bandHz ?? [0, rateHz / 2];
  const cross = crossTransform(x, y, band[0] / rateHz, band[1] / rateHz);
  const scale = Math.sqrt(cross.energyX * cross.energyY);
  const [low, high] = options.betweenS ?? [-n / rateHz, n / rateHz];
  const start = bestLag(cross, Math.max(1 - n, Math.ceil(low * rateHz)), Math.min(n - 1, Math.floor(high * rateHz)));
  if (start === null) return null;
  const { lag, value, bend } = refine(cross, start);
  if (!(bend < 0 && Math.abs(lag - start) < 1)) return null;
  const correlation = Math.min(1, value / scale);
  const meanSquareFrequency = (-bend / value) * rateHz * rateHz;
  const lost = (1 - correlation * correlation) / (correlation * correlation);
  const freedom = (2 * n * (Math.min(band[1], rateHz / 2) - band[0])) / rateHz;
  return { seconds: lag / rateHz, standardError: Math.sqrt(lost / (freedom * meanSquareFrequency)), correlation };
}

/**
 * Centre of gravity of the part of a pulse that is above zero, in samples from index 0; its resolution is far finer
 * than a sample. Take the base line away first, and the sign where pulses are negative.
 *
 * @param x samples
 * @param from first index
 * @param to one past the last
 * @returns NaN where no sample in the range is above zero
 * @example centroid(Float64Array.of(0, 1, 3, 1, 0), 0, 5) // 2
 */
export function centroid(x: Float64Array, from = 0, to: number = x.length): number {
  let weight = 0;
  let moment = 0;
  for (let i = from; i < to; i++) {
    const v = x[i]!;
    if (!(v > 0)) continue;
    weight += v;
    moment += v * (i - from);
  }
  return from + moment / weight;
}

interface Cross {
  size: number;
  /** conj(X) Y for lines 0 to size / 2; zero outside the band. */
  re: Float64Array;
  im: Float64Array;
  energyX: number;
  energyY: number;
}

/** Band edges in cycles a sample. */
function crossTransform(x: Float64Array, y: Float64Array, low: number, high: number): Cross {
  const size = powerOfTwoFrom(2 * x.length);
  const transform = createRealTransform(size);
  const lines = size / 2 + 1;
  const padded = new Float64Array(size);
  const re = new Float64Array(lines);
  const im = new Float64Array(lines);
  const otherRe = new Float64Array(lines);
  const otherIm = new Float64Array(lines);
  padded.set(x);
  transform.forward(padded, re, im);
  padded.set(y);
  transform.forward(padded, otherRe, otherIm);
  let energyX = 0;
  let energyY = 0;
  for (let k = 0; k < lines; k++) {
    const a = re[k]!;
    const b = im[k]!;
    const c = otherRe[k]!;
    const d = otherIm[k]!;
    const within = k >= low * size && k <= high * size;
    const weight = within ? (k === 0 || k === size / 2 ? 1 : 2) / size : 0;
    energyX += weight * (a * a + b * b);
    energyY += weight * (c * c + d * d);
    re[k] = within ? a * c + b * d : 0;
    im[k] = within ? a * d - b * c : 0;
  }
  return { size, re, im, energyX, energyY };
}

/** Whole number of samples with the largest correlation in the range; null where none is positive. */
function bestLag({ size, re, im }: Cross, low: number, high: number): number | null {
  // r[m] = (1/size) Σ C[k] e^(2πi k m / size), from a forward transform: real and imaginary parts of the lines as
  // two real records, since fft(re) is even and fft(im) is odd in m.
  const transform = createRealTransform(size);
  const lines = size / 2 + 1;
  const record = new Float64Array(size);
  const even = new Float64Array(lines);
  const odd = new Float64Array(lines);
  const unused = new Float64Array(lines);
  for (let k = 0; k < size; k++) record[k] = re[k < lines ? k : size - k]!;
  transform.forward(record, even, unused);
  for (let k = 0; k < size; k++) record[k] = k < lines ? im[k]! : -im[size - k]!;
  transform.forward(record, unused, odd);
  let best = 0;
  let at: number | null = null;
  for (let m = low; m <= high; m++) {
    const value = even[Math.abs(m)]! + (m < 0 ? -1 : 1) * odd[Math.abs(m)]!;
    if (value > best) {
      best = value;
      at = m;
    }
  }
  return at;
}

/** Maximum of the Fourier sum near a lag, within one sample of it; with value and second derivative per sample². */
function refine(cross: Cross, start: number): { lag: number; value: number; bend: number } {
  let lag = start;
  let sums = fourierSums(cross, lag);
  for (let i = 0; i < 12; i++) {
    const step = sums.bend < 0 ? -sums.slope / sums.bend : 0;
    const next = Math.min(start + 1, Math.max(start - 1, lag + step));
    const moved = Math.abs(next - lag);
    lag = next;
    sums = fourierSums(cross, lag);
    if (moved < 1e-10) break;
  }
  return { lag, value: sums.value, bend: sums.bend };
}

/** r(m) and its first two derivatives at any real lag. */
function fourierSums({ size, re, im }: Cross, lag: number): { value: number; slope: number; bend: number } {
  const half = size / 2;
  let value = re[0]!;
  let slope = 0;
  let bend = 0;
  for (let k = 1; k <= half; k++) {
    const omega = (2 * Math.PI * k) / size;
    const weight = k === half ? 1 : 2;
    const cos = weight * Math.cos(omega * lag);
    const sin = weight * Math.sin(omega * lag);
    const inPhase = re[k]! * cos - im[k]! * sin;
    value += inPhase;
    slope -= omega * (re[k]! * sin + im[k]! * cos);
    bend -= omega * omega * inPhase;
  }
  return { value: value / size, slope: slope / size, bend: bend / size };
}
