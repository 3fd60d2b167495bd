import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import {
  addSamples,
  coherence,
  createSpectrum,
  crossSpectrum,
  restartSpectrum,
  takeLine,
  welch,
} from '../../../server/core/signal/welch.ts';
import { hann, window } from '../../../server/core/signal/window.ts';
import { check, describeChecks, describeData, sharedTable } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { energy, largestDifference, largestMagnitude, relative, sine } from './signals.ts';

const sum = (x: Float64Array): number => x.reduce((total, v) => total + v, 0);

describe('Welch spectrum', () => {
  it('gives A²/2 for a sine of amplitude A, wherever it lies between two lines', () => {
    for (const hz of [10, 10.25, 10.4]) {
      const { psd, stepHz } = welch(sine(8192, 128, hz, 3), 128, { segment: 512 });
      // the part of the window's skirts beyond the ends, and the end effects of a non-integer number of cycles
      expect(relative(sum(psd) * stepHz, 4.5)).toBeLessThan(1e-3);
    }
  });

  it('keeps the mean square of noise, segment by segment (Parseval)', () => {
    const x = noise(createRandom(1), 4096);
    const { psd, stepHz, segments } = welch(x, 100, {
      segment: 256,
      overlap: 0,
      window: window('boxcar', 256),
      detrend: 'none',
    });
    expect(segments).toBe(16);
    expect(relative(sum(psd) * stepHz, energy(x) / x.length)).toBeLessThan(1e-13);
  });

  it('does not see a constant, unless asked to', () => {
    const x = new Float64Array(1024).fill(9.81);
    expect(largestMagnitude(welch(x, 100, { segment: 256 }).psd)).toBeLessThan(1e-25);
    expect(welch(x, 100, { segment: 256, detrend: 'none' }).psd[0]).toBeGreaterThan(1);
  });

  it('scales with the square of the signal and the inverse of the rate', () => {
    const x = noise(createRandom(2), 1024);
    const one = welch(x, 100, { segment: 256 }).psd;
    const other = welch(
      x.map((v) => 4 * v),
      200,
      { segment: 256 },
    ).psd;
    expect(
      largestDifference(
        other,
        one.map((p) => 8 * p),
      ),
    ).toBeLessThan(1e-14);
  });

  it('refuses records shorter than a segment and options outside their ranges', () => {
    const x = new Float64Array(100);
    expect(() => welch(x, 100, { segment: 128 })).toThrow(RangeError);
    expect(() => coherence(x, x, 100, { segment: 128 })).toThrow(RangeError);
    expect(() => coherence(x, new Float64Array(99), 100, { segment: 64 })).toThrow(RangeError);
    for (const segment of [0, 2, 100, NaN]) expect(() => welch(x, 100, { segment })).toThrow(RangeError);
    for (const overlap of [-1, 64, 1.5]) expect(() => welch(x, 100, { segment: 64, overlap })).toThrow(RangeError);
    expect(() => welch(x, 100, { segment: 64, window: hann(32) })).toThrow(RangeError);
  });
});

describe('rolling spectrum', () => {
  it('gives the same bits for any split into blocks, empty ones included', () => {
    fc.assert(
      fc.property(
        fc.array(fc.integer({ min: 0, max: 300 }), { maxLength: 30 }),
        fc.constantFrom(0, 1, 32, 63),
        (lengths, overlap) => {
          const x = noise(createRandom(8), 2000);
          const whole = welch(x, 500, { segment: 64, overlap });
          const spectrum = createSpectrum(500, { segment: 64, overlap });
          let from = 0;
          for (const length of [...lengths, x.length]) {
            const to = Math.min(x.length, from + length);
            addSamples(spectrum, x, from, to);
            from = to;
          }
          expect(takeLine(spectrum)).toEqual(whole);
        },
      ),
      { seed: 3, numRuns: 40 },
    );
  });

  it('begins a new average with each line and loses no sample between lines', () => {
    const x = noise(createRandom(9), 1000);
    const spectrum = createSpectrum(500, { segment: 128 });
    addSamples(spectrum, x, 0, 450);
    const first = takeLine(spectrum);
    expect(takeLine(spectrum)).toBeNull();
    addSamples(spectrum, x, 450, 1000);
    const second = takeLine(spectrum);
    const whole = welch(x, 500, { segment: 128 });
    const counts = [first?.segments ?? 0, second?.segments ?? 0];
    expect(counts).toEqual([6, 8]);
    expect(whole.segments).toBe(14);
    const mean = whole.psd.map((_, k) => (6 * (first?.psd[k] ?? NaN) + 8 * (second?.psd[k] ?? NaN)) / 14);
    expect(largestDifference(mean, whole.psd)).toBeLessThan(1e-15);
  });

  it('does not join what lies on either side of a gap', () => {
    const x = noise(createRandom(10), 400);
    const spectrum = createSpectrum(500, { segment: 128 });
    addSamples(spectrum, x, 0, 100);
    restartSpectrum(spectrum);
    expect(takeLine(spectrum)).toBeNull();
    addSamples(spectrum, x, 200, 400);
    expect(takeLine(spectrum)).toEqual(welch(x.slice(200), 500, { segment: 128 }));
  });

  it('goes on from a structured clone as from itself', () => {
    const x = noise(createRandom(11), 400);
    const spectrum = createSpectrum(500, { segment: 128 });
    addSamples(spectrum, x, 0, 170);
    const copy = structuredClone(spectrum);
    addSamples(spectrum, x, 170, 400);
    addSamples(copy, x, 170, 400);
    expect(takeLine(copy)).toEqual(takeLine(spectrum));
  });
});

describe('coherence', () => {
  it('is 1 for a linear image, small for strangers, and in between for an image in noise', () => {
    forSeeds(seedsFrom(1, 3), (random) => {
      const x = noise(random, 65_536);
      const image = x.map((v, i) => 2 * v - (x[i - 1] ?? 0));
      const linear = coherence(x, image, 100, { segment: 256 }).coherence;
      // of the 256 samples of a segment the image has one that the record's own segment lacks
      expect(Math.min(...linear.subarray(1))).toBeGreaterThan(1 - 1 / 256);
      const strangers = coherence(x, noise(random, 65_536), 100, { segment: 256 }).coherence;
      expect(sum(strangers) / strangers.length).toBeLessThan(0.01);
      // y = x + noise of equal strength: 1 / (1 + 1)
      const half = coherence(
        x,
        x.map((v) => v + random.normal()),
        100,
        { segment: 256 },
      ).coherence;
      expect(Math.abs(sum(half) / half.length - 0.5)).toBeLessThan(0.01);
    });
  });

  it('is 0 where a record has no power', () => {
    const { coherence: none } = coherence(new Float64Array(256), noise(createRandom(1), 256), 100, { segment: 64 });
    expect(largestMagnitude(none)).toBe(0);
  });

  it('shows a delay as the phase of the cross spectrum: −2πf × delay', () => {
    const x = noise(createRandom(12), 65_536);
    const late = x.map((_, i) => x[i - 3] ?? 0);
    const { re, im, stepHz } = crossSpectrum(x, late, 100, { segment: 512 });
    for (const k of [8, 32, 64]) {
      expect(Math.abs(Math.atan2(im[k] ?? NaN, re[k] ?? NaN) + 2 * Math.PI * k * stepHz * 0.03)).toBeLessThan(0.01);
    }
  });
});

describeChecks('Welch spectrum against welch.* (SciPy 1.17)', () => {
  const Psd = Type.Record(Type.String(), Type.Number());

  it('has the values of the tone', () => {
    const { expected, tolerance } = check('welch.tone', Type.Object({ psd: Psd, sum_psd_df: Type.Number() }));
    const { psd, stepHz } = welch(sine(1024, 128, 10, 2), 128, { segment: 256, overlap: 128 });
    for (const [hz, value] of Object.entries(expected.psd)) {
      expect(Math.abs((psd[Number(hz) / stepHz] ?? NaN) - value)).toBeLessThanOrEqual(
        tolerance.rel * value + tolerance.abs,
      );
    }
    expect(relative(sum(psd) * stepHz, expected.sum_psd_df)).toBeLessThanOrEqual(tolerance.rel);
  });

  it('has the values of the portable noise', () => {
    const { expected, tolerance } = check(
      'welch.lcg',
      Type.Object({ first5: Type.Array(Type.Number()), psd_idx: Psd, sum_psd_df: Type.Number() }),
    );
    let state = 12345n;
    const x = Float64Array.from({ length: 1024 }, () => {
      state = (1103515245n * state + 12345n) % 2147483648n;
      return Number(state) / 2147483648 - 0.5;
    });
    expect(largestDifference(x.subarray(0, 5), expected.first5)).toBeLessThan(1e-15);
    // the group names no rate: with the density per cycle a sample, the sum over 129 lines is the mean square
    const rate = expected.psd_idx['64'] === undefined ? 1 : rateOf(x, expected.psd_idx['64']);
    const { psd, stepHz } = welch(x, rate, { segment: 256 });
    for (const [k, value] of Object.entries(expected.psd_idx))
      expect(relative(psd[Number(k)] ?? NaN, value)).toBeLessThanOrEqual(tolerance.rel);
    expect(relative(sum(psd) * stepHz, expected.sum_psd_df)).toBeLessThanOrEqual(tolerance.rel);
  });

  it('has the variance that welch.overlap predicts for half-overlapped Hann segments', () => {
    const { expected } = check('welch.overlap', Type.Object({ K: Type.Integer(), factor: Type.Number() }));
    const random = createRandom(77);
    let squares = 0;
    let count = 0;
    for (let run = 0; run < 200; run++) {
      const { psd, segments } = welch(noise(random, 64 * (expected.K + 1)), 2, { segment: 128, overlap: 64 });
      expect(segments).toBe(expected.K);
      // white noise of unit variance has the density 1 at a rate of 2
      for (const p of psd.subarray(4, 61)) {
        squares += (p - 1) ** 2;
        count++;
      }
    }
    // 200 × 57 lines, of which neighbours are correlated: standard error of the variance about 2 %
    expect(relative(squares / count, expected.factor)).toBeLessThan(0.08);
  });
});

/** The rate is a scale only: found from one line, then held for all the others. */
function rateOf(x: Float64Array, density: number): number {
  return Math.round((welch(x, 1, { segment: 256 }).psd[64] ?? NaN) / density);
}

describeData('matlab_welch_coherence')('Welch spectrum against MATLAB (series of nitime)', () => {
  const series = (): [Float64Array, Float64Array] => {
    const [first = [], second = []] = sharedTable('matlab_welch_coherence/tseries12.txt');
    return [Float64Array.from(first), Float64Array.from(second)];
  };

  it('has the coherence of mscohere with a symmetric Hann window, to its printed digits', () => {
    const expected = sharedTable('matlab_welch_coherence/cxy_matlab.txt').flat();
    const [x, y] = series();
    const options = { segment: 64, overlap: 32, window: hann(64, 'symmetric'), detrend: 'none' } as const;
    expect(largestDifference(coherence(x, y, 1, options).coherence, expected)).toBeLessThan(1e-7);
    expect(largestDifference(coherence(x, y, 1, { ...options, window: hann(64) }).coherence, expected)).toBeGreaterThan(
      0.01,
    );
  });

  it('has the two-sided spectrum of cpsd for x2 + i x1, put together from densities and cross spectrum', () => {
    const expected = sharedTable('matlab_welch_coherence/fxx_matlab.txt').flat();
    const [x1, x2] = series();
    const options = { segment: 256, overlap: 128, window: hann(256, 'symmetric'), detrend: 'none' } as const;
    const a = welch(x2, 1, options).psd;
    const b = welch(x1, 1, options).psd;
    const { im } = crossSpectrum(x2, x1, 1, options);
    // |A + iB|² = |A|² + |B|² − 2 Im(conj(A) B) at f, plus at −f; one-sided densities are twice the two-sided ones
    const found = Float64Array.from({ length: 256 }, (_, k) => {
      const line = k <= 128 ? k : 256 - k;
      const own = (a[line] ?? NaN) + (b[line] ?? NaN);
      const cross = (k <= 128 ? -2 : 2) * (im[line] ?? NaN);
      return (own + cross) / (line === 0 || line === 128 ? 1 : 2);
    });
    expect(largestDifference(found, expected) / largestMagnitude(expected)).toBeLessThan(1e-7);
  });
});

describe.skipIf(!available('python3-scipy'))('Welch spectrum against SciPy', () => {
  it('agrees with welch, csd and coherence for several windows and overlaps to 1e-12', () => {
    const random = createRandom(3);
    const x = noise(random, 3000).map((v) => v + 2);
    const y = x.map((v, i) => v + 0.5 * (x[i - 2] ?? 0) + random.normal());
    const names = ['hann', 'hamming', 'flattop'] as const;
    const script = `
x, y = np.array(input['x']), np.array(input['y'])
output = []
for name in input['names']:
    for overlap in (0, 100, 128):
        keys = dict(fs=500, window=name, nperseg=256, noverlap=overlap)
        c = signal.csd(x, y, **keys)[1]
        output.append([signal.welch(x, **keys)[1], c.real, c.imag, signal.coherence(x, y, **keys)[1]])
`;
    const theirs = scipy(script, { x, y, names }, Type.Array(Type.Array(Type.Array(Type.Number()))));
    let at = 0;
    for (const name of names) {
      for (const overlap of [0, 100, 128]) {
        const options = { segment: 256, overlap, window: window(name, 256) };
        const [psd = [], re = [], im = [], cxy = []] = theirs[at++] ?? [];
        const scale = largestMagnitude(psd);
        const cross = crossSpectrum(x, y, 500, options);
        expect(largestDifference(welch(x, 500, options).psd, psd) / scale).toBeLessThan(1e-12);
        expect(largestDifference(cross.re, re) / scale).toBeLessThan(1e-12);
        expect(largestDifference(cross.im, im) / scale).toBeLessThan(1e-12);
        expect(largestDifference(coherence(x, y, 500, options).coherence.subarray(1), cxy.slice(1))).toBeLessThan(
          1e-10,
        );
      }
    }
    expect(at).toBe(9);
  });
});
