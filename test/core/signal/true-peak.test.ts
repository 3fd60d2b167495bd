import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { truePeak } from '../../../server/core/signal/true-peak.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { largestMagnitude, relative } from './signals.ts';

/** Cosine with its crest between two samples, the worst place, at sample 100.5. */
function worstCosine(cyclesPerSample: number): Float64Array {
  return Float64Array.from({ length: 200 }, (_, i) => Math.cos(2 * Math.PI * cyclesPerSample * (i - 100.5)));
}

describe('true peak', () => {
  it('reads a sine of any phase up to a quarter of the sampling rate within 0.01 %', () => {
    forSeeds(seedsFrom(1, 200), (random) => {
      const ratio = random.uniform(0.002, 0.25);
      const phase = random.uniform(0, 6.3);
      const x = Float64Array.from({ length: 600 }, (_, i) => Math.sin(2 * Math.PI * ratio * i + phase));
      const { value } = truePeak(x, 24, 576);
      // the slowest sine has a crest each 250 samples
      expect(Math.abs(Math.abs(value) - 1)).toBeLessThan(1e-4);
    });
  });

  it('finds place, sign and height of a pulse whose top lies anywhere between samples', () => {
    forSeeds(seedsFrom(1, 50), (random) => {
      const at = random.uniform(60, 140);
      const height = random.uniform(-5, 5);
      // Ricker's wavelet with its spectrum's peak at 0.05 of the rate; nothing above 0.25 to 1e-9
      const x = Float64Array.from({ length: 200 }, (_, i) => {
        const u = (Math.PI * 0.05 * (i - at)) ** 2;
        return height * (1 - 2 * u) * Math.exp(-u);
      });
      const { value, index } = truePeak(x);
      expect(relative(value, height)).toBeLessThan(2e-5);
      expect(Math.abs(index - at)).toBeLessThan(1e-3);
    });
  });

  it('is never below the largest sample, whatever the signal', () => {
    forSeeds(seedsFrom(1, 20), (random) => {
      const x = noise(random, 300);
      expect(Math.abs(truePeak(x).value)).toBeGreaterThanOrEqual(largestMagnitude(x));
    });
  });

  it('scales with the signal, mirrors with its sign and moves with its start', () => {
    const x = worstCosine(0.13).map((v, i) => v * Math.exp(-(((i - 100) / 30) ** 2)));
    const one = truePeak(x);
    const other = truePeak(x.map((v) => -8 * v));
    expect(other).toEqual({ value: -8 * one.value, index: one.index });
    const late = new Float64Array(300);
    late.set(x, 64);
    expect(truePeak(late).index - one.index).toBeCloseTo(64, 10);
  });

  it('looks for the crest behind a lower sample where another has the highest one', () => {
    // the first burst hits its crest with a sample; the second is 5 % higher but straddles its crest
    const x = Float64Array.from({ length: 400 }, (_, i) => {
      const first = Math.exp(-(((i - 100) / 25) ** 2)) * Math.cos(2 * Math.PI * 0.2 * (i - 100));
      return first + 1.05 * Math.exp(-(((i - 300.5) / 25) ** 2)) * Math.cos(2 * Math.PI * 0.2 * (i - 300.5));
    });
    const { value, index } = truePeak(x);
    expect(relative(value, 1.05)).toBeLessThan(1e-4);
    expect(Math.abs(index - 300.5)).toBeLessThan(1e-3);
  });

  it('looks only inside its range, and reads a crest cut by the range at its samples', () => {
    const x = worstCosine(0.05);
    expect(truePeak(x, 108, 113).value).toBeLessThan(0);
    const rising = Float64Array.from({ length: 50 }, (_, i) => i);
    expect(truePeak(rising)).toEqual({ value: 49, index: 49 });
    expect(truePeak(rising, 10, 20)).toEqual({ value: 19, index: 19 });
    expect(truePeak(rising.slice().reverse())).toEqual({ value: 49, index: 0 });
  });

  it('finds a crest near either end of the record, where its kernel reaches beyond', () => {
    for (const at of [3.4, 46.6]) {
      const x = Float64Array.from({ length: 51 }, (_, i) => Math.exp(-(((i - at) / 3) ** 2)));
      const { value, index } = truePeak(x);
      expect(relative(value, 1)).toBeLessThan(2e-3);
      expect(Math.abs(index - at)).toBeLessThan(0.02);
    }
    expect(truePeak(Float64Array.of(0, 1, 1, 0)).value).toBeGreaterThan(1);
  });

  it('reads a single spike as it is, a flat top as it is, and zeros as zero', () => {
    const spike = new Float64Array(64);
    spike[30] = -7;
    expect(truePeak(spike)).toEqual({ value: -7, index: 30 });
    expect(truePeak(new Float64Array(50).fill(2)).value).toBe(2);
    expect(truePeak(new Float64Array(9), 2, 5)).toEqual({ value: 0, index: 2 });
    expect(truePeak(Float64Array.of(-3))).toEqual({ value: -3, index: 0 });
  });

  it('passes over values that are not numbers', () => {
    const x = worstCosine(0.05);
    x[50] = NaN;
    expect(relative(Math.abs(truePeak(x).value), 1)).toBeLessThan(1e-4);
    expect(truePeak(new Float64Array(5).fill(NaN))).toEqual({ value: 0, index: 0 });
    const near = worstCosine(0.2);
    near[104] = NaN;
    expect(Math.abs(truePeak(near, 98, 106).value)).toBeGreaterThanOrEqual(Math.cos(0.2 * Math.PI));
  });

  it('refuses an empty range and one outside the record', () => {
    const x = new Float64Array(10);
    for (const [from, to] of [
      [5, 5],
      [6, 5],
      [-1, 5],
      [0, 11],
      [NaN, 5],
    ] as const) {
      expect(() => truePeak(x, from, to)).toThrow(RangeError);
    }
  });
});

describeChecks('true peak against sig.peak_sampling and peak.parabola', () => {
  it('undoes what sampling loses at each ratio of the table', () => {
    const Row = Type.Object({ f_over_fs: Type.Number(), ratio: Type.Number() });
    const { expected } = check('sig.peak_sampling', Type.Array(Row));
    for (const { f_over_fs, ratio } of expected) {
      // the slowest ones in their own length of a cycle around the crest
      const x = worstCosine(f_over_fs).slice(60, 142);
      expect(largestMagnitude(worstCosine(f_over_fs).subarray(100, 102))).toBeCloseTo(ratio, 7);
      expect(relative(Math.abs(truePeak(x, 30, 52).value), 1)).toBeLessThan(1e-4);
    }
  });

  it('has the closed form of the three-point parabola for a signal that is one', () => {
    const Parabola = Type.Object({ y: Type.Array(Type.Number()), offset_samples: Type.Number(), peak: Type.Number() });
    const { expected } = check('peak.parabola', Parabola);
    const [a = NaN, b = NaN, c = NaN] = expected.y;
    // the parabola through the three values, continued: its second difference is constant
    const x = Float64Array.from({ length: 3 }, (_, i) => [a, b, c][i] ?? NaN);
    const long = Float64Array.from({ length: 101 }, (_, i) => {
      const t = i - 50;
      return b + ((c - a) / 2) * t + ((a - 2 * b + c) / 2) * t * t;
    });
    expect(long[49]).toBeCloseTo(x[0] ?? NaN, 12);
    const { value, index } = truePeak(long, 49, 52);
    // a parabola is not band-limited: the kernel's side lobes meet its large values 12 samples away
    expect(Math.abs(index - 50 - expected.offset_samples)).toBeLessThan(2e-3);
    expect(Math.abs(value - expected.peak)).toBeLessThan(2e-3);
  });
});

describe.skipIf(!available('python3-scipy'))('true peak against SciPy', () => {
  it('agrees with Fourier interpolation by scipy.signal.resample to 0.01 %', () => {
    const records = seedsFrom(1, 20).map((seed) => {
      const random = createRandom(seed);
      // ten sines below 0.2 of the rate under a bell that is 1e-7 at the ends
      const sines = Array.from(
        { length: 10 },
        () => [random.uniform(0.01, 0.2), random.uniform(0, 6.3), random.normal()] as const,
      );
      return Float64Array.from({ length: 512 }, (_, i) => {
        const bell = Math.exp(-(((i - 256) / 64) ** 2));
        return bell * sines.reduce((sum, [ratio, phase, a]) => sum + a * Math.cos(2 * Math.PI * ratio * i + phase), 0);
      });
    });
    const script = `output = [np.max(np.abs(signal.resample(np.array(x), len(x) * 128))) for x in input]`;
    const theirs = scipy(
      script,
      records.map((x) => Array.from(x)),
      Type.Array(Type.Number()),
    );
    for (const [i, x] of records.entries()) {
      expect(relative(Math.abs(truePeak(x).value), theirs[i] ?? NaN), `seed ${i + 1}`).toBeLessThan(1e-4);
    }
  });
});
