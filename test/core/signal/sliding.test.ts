import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { excursions, slidingMeanSquareMax } from '../../../server/core/signal/sliding.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { energy, relative, sine } from './signals.ts';

/** Every window summed anew. */
function slowly(x: Float64Array, width: number): number {
  let largest = 0;
  const span = Math.min(width, x.length);
  for (let i = 0; i + span <= x.length; i++) largest = Math.max(largest, energy(x.subarray(i, i + span)) / span);
  return largest;
}

describe('sliding mean square', () => {
  it('equals the largest of all windows summed anew, for every width and length', () => {
    const x = noise(createRandom(1), 60);
    for (let n = 1; n <= 60; n++) {
      for (let width = 1; width <= n + 3; width++) {
        const part = x.slice(0, n);
        expect(relative(slidingMeanSquareMax(part, width), slowly(part, width))).toBeLessThan(1e-13);
      }
    }
  });

  it('is exact behind a spike a thousand million times larger than the rest', () => {
    const n = 10_000;
    const quiet = noise(createRandom(2), n, 1e-3);
    const x = quiet.slice();
    x[100] = 1e6;
    // with the spike out of reach the answer is that of the quiet record, to rounding
    expect(relative(slidingMeanSquareMax(x.slice(101), 500), slowly(quiet.slice(101), 500))).toBeLessThan(1e-13);
    const spikes = quiet.slice();
    for (let i = 0; i < n; i += 1000) spikes[i] = 1e6;
    const windows = 400;
    let largest = 0;
    for (let i = 1; i + windows <= 1000; i++)
      largest = Math.max(largest, energy(quiet.subarray(i, i + windows)) / windows);
    expect(relative(slidingMeanSquareMax(spikes.slice(1, 1000), windows), largest)).toBeLessThan(1e-13);
  });

  it('does not let a sum drift: a level that returns after a spike is found to the last digits', () => {
    const x = new Float64Array(3000).fill(0.1);
    x[10] = 1e9;
    x.fill(0.2, 2000);
    x[10] = 1e9;
    const behind = x.slice(11);
    expect(slidingMeanSquareMax(behind, 100)).toBeCloseTo(0.04, 15);
    // the spike's own window
    expect(relative(slidingMeanSquareMax(x, 100), (1e18 + 99 * 0.01) / 100)).toBeLessThan(1e-15);
  });

  it('gives A²/2 for a sine over whole cycles, and scales with the square', () => {
    const x = sine(2000, 500, 5, 3);
    expect(slidingMeanSquareMax(x, 500)).toBeCloseTo(4.5, 12);
    expect(
      slidingMeanSquareMax(
        x.map((v) => 4 * v),
        500,
      ),
    ).toBe(16 * slidingMeanSquareMax(x, 500));
  });

  it('is 0 for nothing, takes the whole of a short record, and refuses a width below 1', () => {
    expect(slidingMeanSquareMax(new Float64Array(0), 5)).toBe(0);
    expect(slidingMeanSquareMax(Float64Array.of(3, 4), 10)).toBe(12.5);
    for (const width of [0, -1, 1.5, NaN])
      expect(() => slidingMeanSquareMax(Float64Array.of(1), width)).toThrow(RangeError);
  });
});

describe('excursions', () => {
  it('have the closed form for a sine: (2/π) acos(limit/A) of the time, two a cycle', () => {
    for (const limit of [0.1, 0.5, 0.9]) {
      const found = excursions(sine(100_000, 1000, 1, 1, 0.001), limit, 1000);
      expect(found.count).toBe(200);
      // straight lines instead of arcs of 1000 samples a cycle
      expect(Math.abs(found.secondsAbove / 100 - (2 / Math.PI) * Math.acos(limit))).toBeLessThan(1e-5);
    }
  });

  it('count a swing through both limits as two, and one cut by the end of the record as one', () => {
    expect(excursions(Float64Array.of(2, -2, 2), 1, 10).count).toBe(3);
    expect(excursions(Float64Array.of(2, 2, 0), 1, 10)).toEqual({ secondsAbove: 0.15, count: 1 });
    expect(excursions(Float64Array.of(2, -2), 1, 10).secondsAbove).toBeCloseTo(0.05, 15);
    expect(excursions(Float64Array.of(0, 2, 0, -2, 0), 1, 1)).toEqual({ secondsAbove: 2, count: 2 });
  });

  it('are none at the limit itself, in silence and in an empty record', () => {
    expect(excursions(Float64Array.of(1, -1, 1), 1, 10)).toEqual({ secondsAbove: 0, count: 0 });
    expect(excursions(new Float64Array(0), 1, 10)).toEqual({ secondsAbove: 0, count: 0 });
    expect(excursions(new Float64Array(9), 0, 10)).toEqual({ secondsAbove: 0, count: 0 });
  });

  it('never become longer or more time when the limit rises, nor exceed the record', () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 1, max: 1e6 }),
        fc.double({ min: 0, max: 2 }),
        fc.double({ min: 0, max: 2 }),
        (seed, a, b) => {
          const x = noise(createRandom(seed), 200);
          const low = excursions(x, Math.min(a, b), 100);
          const high = excursions(x, Math.max(a, b), 100);
          expect(high.secondsAbove).toBeLessThanOrEqual(low.secondsAbove + 1e-12);
          expect(low.secondsAbove).toBeLessThanOrEqual(1.99 + 1e-12);
        },
      ),
      { seed: 2, numRuns: 100 },
    );
  });

  it('are the same upside down and backwards', () => {
    forSeeds(seedsFrom(1, 10), (random) => {
      const x = noise(random, 500);
      const up = excursions(x, 1, 100);
      const down = excursions(
        x.map((v) => -v),
        1,
        100,
      );
      const back = excursions(x.slice().reverse(), 1, 100);
      expect(down).toEqual(up);
      expect(back.count).toBe(up.count);
      expect(back.secondsAbove).toBeCloseTo(up.secondsAbove, 12);
    });
  });
});
