/**
 * Cosine-sum windows (Harris 1978; Heinzel, Rüdiger and Schilling 2002 for the flat top, in the coefficients that
 * SciPy and MATLAB use).
 */
export type WindowName = 'boxcar' | 'hann' | 'hamming' | 'blackman' | 'blackmanharris' | 'flattop';

/** Periodic for spectra: the next sample would begin a new period. Symmetric for filters, and in MATLAB's hann(n). */
export type WindowForm = 'periodic' | 'symmetric';

/** Factors a of Σ (−1)^k a[k] cos(2πkn/N). */
const COEFFICIENTS: Readonly<Record<WindowName, readonly number[]>> = {
  boxcar: [1],
  hann: [0.5, 0.5],
  hamming: [0.54, 0.46],
  blackman: [0.42, 0.5, 0.08],
  blackmanharris: [0.35875, 0.48829, 0.14128, 0.01168],
  flattop: [0.21557895, 0.41663158, 0.277263158, 0.083578947, 0.006947368],
};

/**
 * A window by its name.
 *
 * @param name which window
 * @param n samples, at least 1; a window of one sample is 1
 * @param form periodic (default) or symmetric
 * @returns n factors
 * @throws RangeError where n is not a whole number from 1
 * @example window('hamming', 4, 'periodic') // 0.08, 0.54, 1, 0.54
 */
export function window(name: WindowName, n: number, form: WindowForm = 'periodic'): Float64Array {
  if (!Number.isInteger(n) || n < 1) throw new RangeError(`a window of ${n} samples`);
  if (n === 1) return Float64Array.of(1);
  const period = form === 'periodic' ? n : n - 1;
  const factors = COEFFICIENTS[name];
  return Float64Array.from({ length: n }, (_, i) => {
    let sum = 0;
    for (const [k, a] of factors.entries()) sum += (k % 2 === 0 ? a : -a) * Math.cos((2 * Math.PI * k * i) / period);
    return sum;
  });
}

/**
 * Hann's window. Parameters, result and errors as in `window`.
 *
 * @example hann(4, 'symmetric') // 0, 0.75, 0.75, 0
 */
export function hann(n: number, form: WindowForm = 'periodic'): Float64Array {
  return window('hann', n, form);
}

/**
 * Factor by which a window lowers the amplitude of a sine on a line: its mean.
 *
 * @example coherentGain(hann(4096)) // 0.5
 */
export function coherentGain(factors: Float64Array): number {
  let sum = 0;
  for (const w of factors) sum += w;
  return sum / factors.length;
}

/**
 * Equivalent noise bandwidth in lines: N Σw² / (Σw)².
 *
 * @example enbw(hann(4096)) // 1.5
 */
export function enbw(factors: Float64Array): number {
  let sum = 0;
  let squares = 0;
  for (const w of factors) {
    sum += w;
    squares += w * w;
  }
  return (factors.length * squares) / (sum * sum);
}
