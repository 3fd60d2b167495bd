import FFT from 'fft.js';

/** Transform of real records of one length; holds its tables and work space, so make it once and keep it. */
export interface RealTransform {
  /** Samples in, a power of two. */
  readonly size: number;
  /**
   * X[k] = Σ x[n] e^(−2πi k n / size) for k = 0 … size / 2.
   *
   * @param input `size` samples
   * @param re at least size / 2 + 1 long; written
   * @param im as `re`
   */
  forward(input: Float64Array, re: Float64Array, im: Float64Array): void;
}

/** Longest transform: 16 Mi samples; its tables take some 400 MB. */
const LARGEST = 2 ** 24;

/**
 * A transform of `size` real samples by one of half as many complex ones (Press et al., Numerical Recipes, 3rd ed.,
 * section 12.3.2). Error below 1e-13 of the largest amplitude.
 *
 * @param size power of two, 4 to 2^24
 * @throws RangeError for other sizes
 * @example
 * const re = new Float64Array(3), im = new Float64Array(3);
 * createRealTransform(4).forward(Float64Array.of(1, 2, 3, 4), re, im); // re = 10, -2, -2; im = 0, 2, 0
 */
export function createRealTransform(size: number): RealTransform {
  const half = checkedSize(size) / 2;
  const fft = new FFT(half);
  const spectrum = new Float64Array(size);
  const cosines = new Float64Array(half + 1);
  const sines = new Float64Array(half + 1);
  for (let k = 0; k <= half; k++) {
    cosines[k] = Math.cos((Math.PI * k) / half);
    sines[k] = Math.sin((Math.PI * k) / half);
  }

  return {
    size,
    forward(input, re, im) {
      if (input.length !== size || re.length <= half || im.length <= half) {
        throw new RangeError(
          `a transform of ${size} samples got arrays of ${input.length}, ${re.length}, ${im.length}`,
        );
      }
      // Even samples are the real parts and odd ones the imaginary parts of the half-size record: as they lie.
      fft.transform(spectrum, input);
      re[0] = spectrum[0]! + spectrum[1]!;
      im[0] = 0;
      re[half] = spectrum[0]! - spectrum[1]!;
      im[half] = 0;
      for (let k = 1; k < half; k++) {
        const a = spectrum[2 * k]!;
        const b = spectrum[2 * k + 1]!;
        const c = spectrum[size - 2 * k]!;
        const d = spectrum[size - 2 * k + 1]!;
        const evenRe = 0.5 * (a + c);
        const evenIm = 0.5 * (b - d);
        const oddRe = 0.5 * (b + d);
        const oddIm = 0.5 * (c - a);
        const cos = cosines[k]!;
        const sin = sines[k]!;
        re[k] = evenRe + cos * oddRe + sin * oddIm;
        im[k] = evenIm + cos * oddIm - sin * oddRe;
      }
    },
  };
}

/**
 * The analytic signal: the record and, as imaginary part, its Hilbert transform. Its magnitude is the envelope.
 *
 * The record is continued by zeros to a power of two, and taken as periodic: some cycles at either end are wrong
 * unless the signal has died away there.
 *
 * @param x at least 2 samples
 * @returns real and imaginary part, each as long as `x`
 * @example analyticSignal(Float64Array.of(1, 0, -1, 0)).im // 0, 1, 0, -1
 */
export function analyticSignal(x: Float64Array): { re: Float64Array; im: Float64Array } {
  const size = checkedSize(Math.max(4, powerOfTwoFrom(x.length)));
  const fft = new FFT(size);
  const record = new Float64Array(2 * size);
  for (let i = 0; i < x.length; i++) record[2 * i] = x[i]!;
  const spectrum = new Float64Array(2 * size);
  fft.transform(spectrum, record);
  for (let k = 1; k < size / 2; k++) {
    spectrum[2 * k]! *= 2;
    spectrum[2 * k + 1]! *= 2;
  }
  spectrum.fill(0, size + 2);
  fft.inverseTransform(record, spectrum);
  const im = new Float64Array(x.length);
  for (let i = 0; i < x.length; i++) im[i] = record[2 * i + 1]!;
  return { re: x.slice(), im };
}

/** The smallest power of two that is not less than n. */
export function powerOfTwoFrom(n: number): number {
  return 2 ** Math.ceil(Math.log2(Math.max(1, n)));
}

function checkedSize(size: number): number {
  if (!(size >= 4 && size <= LARGEST && Number.isInteger(Math.log2(size)))) {
    throw new RangeError(`a transform of ${size} samples: not a power of two from 4 to ${LARGEST}`);
  }
  return size;
}
