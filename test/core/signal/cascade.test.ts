import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { bandpass, highpass, lowpass, type Sections } from '../../../server/core/signal/butterworth.ts';
import { createCascade, filterInto, settleAt } from '../../../server/core/signal/cascade.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { largestDifference, largestMagnitude } from './signals.ts';

/** One to eight sections, odd and even counts: every path through the filter. */
const DESIGNS: readonly Sections[] = [
  lowpass(1, 30, 500),
  lowpass(2, 30, 500),
  lowpass(4, 30, 500),
  highpass(6, 0.5, 500),
  lowpass(8, 45, 500),
  bandpass(5, 1, 30, 200),
  bandpass(8, 2, 60, 500),
];

function filtered(sections: Sections, x: Float64Array): Float64Array {
  const y = new Float64Array(x.length);
  filterInto(createCascade(sections), x, y, 0, x.length);
  return y;
}

/** The difference equation written out, one section after the other (direct form I). */
function slowly(sections: Sections, x: Float64Array): Float64Array {
  let input = x;
  for (let s = 0; s < sections.length; s += 5) {
    const [b0 = 0, b1 = 0, b2 = 0, a1 = 0, a2 = 0] = sections.subarray(s, s + 5);
    const from = input;
    const y = new Float64Array(x.length);
    for (let i = 0; i < x.length; i++) {
      y[i] =
        b0 * (from[i] ?? 0) +
        b1 * (from[i - 1] ?? 0) +
        b2 * (from[i - 2] ?? 0) -
        a1 * (y[i - 1] ?? 0) -
        a2 * (y[i - 2] ?? 0);
    }
    input = y;
  }
  return input;
}

describe('filter cascade', () => {
  it('computes the difference equation', () => {
    forSeeds(seedsFrom(1, 3), (random) => {
      const x = noise(random, 2000);
      for (const sections of DESIGNS) {
        const slow = slowly(sections, x);
        expect(largestDifference(filtered(sections, x), slow)).toBeLessThan(1e-10 * largestMagnitude(slow));
      }
    });
  });

  it('gives the same bits for every split of a short record in two, empty parts included', () => {
    const x = noise(createRandom(7), 40);
    for (const sections of DESIGNS) {
      const whole = filtered(sections, x);
      for (let cut = 0; cut <= x.length; cut++) {
        const cascade = createCascade(sections);
        const y = new Float64Array(x.length);
        filterInto(cascade, x, y, 0, cut);
        filterInto(cascade, x, y, cut, x.length);
        expect(y).toEqual(whole);
      }
    }
  });

  it('gives the same bits for random splits of a long record, in place or not', () => {
    fc.assert(
      fc.property(
        fc.array(fc.integer({ min: 0, max: 700 }), { maxLength: 20 }),
        fc.integer({ min: 1, max: 1e6 }),
        fc.constantFrom(...DESIGNS),
        (lengths, seed, sections) => {
          const x = noise(createRandom(seed), 3000);
          const whole = filtered(sections, x);
          const cascade = createCascade(sections);
          let from = 0;
          for (const length of [...lengths, x.length]) {
            const to = Math.min(x.length, from + length);
            filterInto(cascade, x, x, from, to);
            from = to;
          }
          expect(x).toEqual(whole);
        },
      ),
      { seed: 5, numRuns: 60 },
    );
  });

  it('goes on from a structured clone as from itself', () => {
    const x = noise(createRandom(9), 200);
    const cascade = createCascade(bandpass(5, 1, 30, 200));
    const y = new Float64Array(200);
    filterInto(cascade, x, y, 0, 90);
    const copy = structuredClone(cascade);
    const z = new Float64Array(200);
    filterInto(cascade, x, y, 90, 200);
    filterInto(copy, x, z, 90, 200);
    expect(z.subarray(90)).toEqual(y.subarray(90));
  });

  it('writes nothing outside the range it is given', () => {
    const y = new Float64Array(10).fill(7);
    filterInto(createCascade(lowpass(4, 30, 500)), new Float64Array(10).fill(1), y, 3, 6);
    expect([...y.subarray(0, 3), ...y.subarray(6)]).toEqual([7, 7, 7, 7, 7, 7, 7]);
  });

  it('is linear and does not depend on when it starts', () => {
    const random = createRandom(4);
    const sections = lowpass(4, 30, 500);
    const x = noise(random, 500);
    const late = new Float64Array(600);
    late.set(x, 100);
    const scaled = filtered(
      sections,
      late.map((v) => 2 * v),
    ).subarray(100);
    expect(
      largestDifference(
        scaled,
        filtered(sections, x).map((v) => 2 * v),
      ),
    ).toBeLessThan(1e-14);
  });

  it('passes a constant from the first sample on when settled on it, and stops it in a high-pass', () => {
    for (const sections of DESIGNS) {
      const cascade = createCascade(sections);
      settleAt(cascade, 9.81);
      const y = new Float64Array(200).fill(9.81);
      filterInto(cascade, y, y, 0, 200);
      const gain = sections === DESIGNS[3] || sections.length === 25 || sections.length === 40 ? 0 : 1;
      expect(largestDifference(y, new Float64Array(200).fill(9.81 * gain))).toBeLessThan(1e-9);
    }
  });

  it('never falls into subnormal numbers when the input falls silent', () => {
    for (const sections of DESIGNS) {
      const cascade = createCascade(sections);
      const y = new Float64Array(200_000);
      y[0] = 1;
      filterInto(cascade, y, y, 0, y.length);
      const smallest = 2.2250738585072014e-308;
      for (const value of cascade.memory) expect(value === 0 || Math.abs(value) >= smallest).toBe(true);
      expect(Math.abs(y[y.length - 1] ?? NaN)).toBeLessThan(1e-99);
    }
  });

  it('owns its sections, and refuses broken rows', () => {
    const sections = lowpass(2, 30, 500);
    const cascade = createCascade(sections);
    sections.fill(NaN);
    const y = Float64Array.of(1);
    filterInto(cascade, y, y, 0, 1);
    expect(y[0]).toBeGreaterThan(0);
    expect(() => createCascade(new Float64Array(0))).toThrow(RangeError);
    expect(() => createCascade(new Float64Array(6))).toThrow(RangeError);
  });
});

describe.skipIf(!available('python3-scipy'))('filter cascade against SciPy', () => {
  it('agrees with sosfilt on the same sections, at rest and settled by sosfilt_zi, to rounding', () => {
    const x = noise(createRandom(1), 3000).map((v) => v + 5);
    const rows = DESIGNS.map((sections) => {
      const list: number[][] = [];
      for (let i = 0; i < sections.length; i += 5)
        list.push([...sections.subarray(i, i + 3), 1, ...sections.subarray(i + 3, i + 5)]);
      return list;
    });
    const script = `
x = np.array(input['x'])
output = []
for rows in input['rows']:
    sos = np.array(rows)
    output.append([signal.sosfilt(sos, x), signal.sosfilt(sos, x, zi=signal.sosfilt_zi(sos) * x[0])[0]])
`;
    const theirs = scipy(script, { x, rows }, Type.Array(Type.Array(Type.Array(Type.Number()))));
    for (const [i, sections] of DESIGNS.entries()) {
      // sums in another order: rounding of 1e-16 × 5, magnified up to (rate / 2π edge)² = 25 000 by the slow poles
      expect(largestDifference(filtered(sections, x), theirs[i]?.[0] ?? [])).toBeLessThan(1.3e-11);
      const cascade = createCascade(sections);
      settleAt(cascade, x[0] ?? NaN);
      const y = new Float64Array(x.length);
      filterInto(cascade, x, y, 0, x.length);
      // sosfilt_zi solves a linear system whose rounding is magnified by the slow poles of the high-pass
      expect(largestDifference(y, theirs[i]?.[1] ?? [])).toBeLessThan(1e-9);
    }
  });
});
