import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { analyticSignal, createRealTransform, powerOfTwoFrom } from '../../../server/core/signal/fourier.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { energy, largestDifference, largestMagnitude, sine } from './signals.ts';

function transformed(x: Float64Array): { re: Float64Array; im: Float64Array } {
  const re = new Float64Array(x.length / 2 + 1);
  const im = new Float64Array(x.length / 2 + 1);
  createRealTransform(x.length).forward(x, re, im);
  return { re, im };
}

/** By the definition; angles reduced to one turn so that they are exact to rounding. */
function slowly(x: Float64Array): { re: Float64Array; im: Float64Array } {
  const n = x.length;
  const re = new Float64Array(n / 2 + 1);
  const im = new Float64Array(n / 2 + 1);
  for (let k = 0; k <= n / 2; k++) {
    for (let i = 0; i < n; i++) {
      const angle = (2 * Math.PI * ((k * i) % n)) / n;
      re[k] = (re[k] ?? 0) + (x[i] ?? 0) * Math.cos(angle);
      im[k] = (im[k] ?? 0) - (x[i] ?? 0) * Math.sin(angle);
    }
  }
  return { re, im };
}

describe('real Fourier transform', () => {
  it('agrees with the definition to 1e-13 of the largest amplitude at every size from 4 to 1024', () => {
    for (let size = 4; size <= 1024; size *= 2) {
      const x = noise(createRandom(size), size);
      const fast = transformed(x);
      const slow = slowly(x);
      const scale = Math.max(largestMagnitude(slow.re), largestMagnitude(slow.im));
      expect(largestDifference(fast.re, slow.re) / scale).toBeLessThan(1e-13);
      expect(largestDifference(fast.im, slow.im) / scale).toBeLessThan(1e-13);
    }
  });

  it('keeps the energy (Parseval)', () => {
    forSeeds(seedsFrom(1, 5), (random) => {
      const n = 4096;
      const x = noise(random, n);
      const { re, im } = transformed(x);
      let sum = 0;
      for (let k = 0; k <= n / 2; k++)
        sum += ((re[k] ?? 0) ** 2 + (im[k] ?? 0) ** 2) * (k === 0 || k === n / 2 ? 1 : 2);
      expect(Math.abs(sum / n / energy(x) - 1)).toBeLessThan(1e-13);
    });
  });

  it('turns a circular shift by s samples into a factor e^(−2πiks/n)', () => {
    fc.assert(
      fc.property(fc.integer({ min: 0, max: 255 }), fc.integer({ min: 1, max: 1000 }), (shift, seed) => {
        const n = 256;
        const x = noise(createRandom(seed), n);
        const shifted = x.map((_, i) => x[(i - shift + n) % n] ?? NaN);
        const { re, im } = transformed(x);
        const expectedRe = re.map((a, k) => {
          const angle = (2 * Math.PI * ((k * shift) % n)) / n;
          return a * Math.cos(angle) + (im[k] ?? NaN) * Math.sin(angle);
        });
        expect(largestDifference(transformed(shifted).re, expectedRe)).toBeLessThan(1e-12 * largestMagnitude(re));
      }),
      { seed: 11, numRuns: 50 },
    );
  });

  it('is linear, and gives the same bits for the same samples', () => {
    const random = createRandom(3);
    const x = noise(random, 128);
    const y = noise(random, 128);
    const sum = transformed(x.map((v, i) => 2 * v - 3 * (y[i] ?? NaN)));
    const expected = transformed(x).re.map((a, k) => 2 * a - 3 * (transformed(y).re[k] ?? NaN));
    expect(largestDifference(sum.re, expected)).toBeLessThan(1e-13 * largestMagnitude(expected) * 5);
    expect(transformed(x)).toEqual(transformed(x));
  });

  it('finds a sine of amplitude A on line k as −A n / 2 in the imaginary part', () => {
    const { re, im } = transformed(sine(64, 64, 5, 3));
    expect(im[5]).toBeCloseTo(-96, 10);
    im[5] = 0;
    expect(largestMagnitude(im)).toBeLessThan(1e-12);
    expect(largestMagnitude(re)).toBeLessThan(1e-12);
  });

  it('refuses sizes that are not a power of two from 4, and arrays that do not fit', () => {
    for (const size of [0, 2, 3, 6, 1000, -4, NaN, 2 ** 25])
      expect(() => createRealTransform(size)).toThrow(RangeError);
    const four = new Float64Array(4);
    expect(() => createRealTransform(8).forward(four, four, four)).toThrow(RangeError);
    expect(() => createRealTransform(4).forward(four, new Float64Array(2), four)).toThrow(RangeError);
    expect(() => createRealTransform(4).forward(four, four, new Float64Array(2))).toThrow(RangeError);
  });

  it('counts up to the next power of two', () => {
    expect([0, 1, 2, 3, 4, 5, 1023, 1024, 1025].map(powerOfTwoFrom)).toEqual([1, 1, 2, 4, 4, 8, 1024, 1024, 2048]);
  });
});

describe('analytic signal', () => {
  it('shows the envelope of a decaying oscillation that dies away inside the record', () => {
    const n = 1024;
    const envelope = Float64Array.from({ length: n }, (_, i) => Math.exp(-(((i - 500) / 80) ** 2)));
    const x = envelope.map((a, i) => a * Math.cos(0.6 * i));
    const { re, im } = analyticSignal(x);
    const found = re.map((v, i) => Math.hypot(v, im[i] ?? NaN));
    // Bedrosian: right where the envelope has no power above the carrier; at the ends it is exp(-39) = 1e-17
    expect(largestDifference(found, envelope)).toBeLessThan(1e-9);
  });

  it('shifts each sine by a quarter cycle and leaves the samples as they are', () => {
    const x = sine(256, 256, 9, 2);
    const { re, im } = analyticSignal(x);
    expect(re).toEqual(x);
    expect(largestDifference(im, sine(256, 256, 9, 2, -Math.PI / 2))).toBeLessThan(1e-12);
  });

  it('takes records of any length by zeros behind them', () => {
    const { im } = analyticSignal(Float64Array.of(1, 0, -1));
    expect(im).toHaveLength(3);
    expect(largestDifference(im, Float64Array.of(0, 1, 0))).toBeLessThan(1e-15);
  });
});

describe.skipIf(!available('python3-scipy'))('Fourier transform against SciPy', () => {
  it('agrees with numpy.fft.rfft and scipy.signal.hilbert to 1e-13 of the largest value', () => {
    const x = noise(createRandom(2026), 2048);
    const Lists = Type.Object({
      re: Type.Array(Type.Number()),
      im: Type.Array(Type.Number()),
      hilbert: Type.Array(Type.Number()),
    });
    const script = `
x = np.array(input)
X = np.fft.rfft(x)
output = {'re': X.real, 'im': X.imag, 'hilbert': signal.hilbert(x).imag}
`;
    const theirs = scipy(script, x, Lists);
    const ours = transformed(x);
    const scale = largestMagnitude(theirs.re);
    expect(largestDifference(ours.re, theirs.re) / scale).toBeLessThan(1e-13);
    expect(largestDifference(ours.im, theirs.im) / scale).toBeLessThan(1e-13);
    expect(largestDifference(analyticSignal(x).im, theirs.hilbert) / largestMagnitude(theirs.hilbert)).toBeLessThan(
      1e-13,
    );
  });
});
