import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { bandpass, gainAt, highpass, lowpass } from '../../../server/core/signal/butterworth.ts';
import { createCascade, filterInto } from '../../../server/core/signal/cascade.ts';
import { zeroPhase, zeroPhaseLowpass } from '../../../server/core/signal/zero-phase.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, noise } from '../../support/random.ts';
import { largestDifference, largestMagnitude, relative, sine } from './signals.ts';

/** Three cycles of a 25 Hz sine from 1 s on, in 2 s at 500 Hz: the burst of butter.filtfilt. */
const BURST = Float64Array.from({ length: 1000 }, (_, i) => {
  const t = i / 500 - 1;
  return t >= 0 && t < 3 / 25 ? Math.sin(2 * Math.PI * 25 * t) : 0;
});

describe('zero-phase filter', () => {
  it('multiplies a sine in the middle of a record by the gain squared and does not move it', () => {
    for (const hz of [5, 20, 30, 45]) {
      const x = sine(4000, 500, hz);
      const y = zeroPhase(lowpass(4, 30, 500), x);
      const expected = x.map((v) => v * gainAt(lowpass(4, 30, 500), hz, 500) ** 2);
      expect(largestDifference(y.subarray(1000, 3000), expected.subarray(1000, 3000))).toBeLessThan(1e-9);
    }
  });

  it('commutes with turning time round (away from the ends)', () => {
    const x = noise(createRandom(1), 2000);
    const there = zeroPhase(lowpass(4, 30, 500), x);
    const back = zeroPhase(lowpass(4, 30, 500), x.slice().reverse()).reverse();
    expect(largestDifference(there.subarray(500, 1500), back.subarray(500, 1500))).toBeLessThan(1e-12);
  });

  it('leaves a constant and a straight line as they are', () => {
    const line = Float64Array.from({ length: 300 }, (_, i) => 3 - 0.01 * i);
    expect(largestDifference(zeroPhase(lowpass(2, 60, 200), line, 200), line)).toBeLessThan(1e-9);
    expect(largestDifference(zeroPhase(lowpass(4, 30, 500), new Float64Array(3).fill(2)), [2, 2, 2])).toBeLessThan(
      1e-12,
    );
  });

  it('takes records shorter than its continuation, one sample and none', () => {
    expect(zeroPhase(lowpass(4, 30, 500), new Float64Array(0))).toHaveLength(0);
    expect(largestDifference(zeroPhase(lowpass(4, 30, 500), Float64Array.of(4)), [4])).toBeLessThan(1e-12);
    expect(zeroPhase(lowpass(8, 30, 500), noise(createRandom(1), 5))).toHaveLength(5);
  });

  it('does not change its input', () => {
    const x = noise(createRandom(2), 100);
    const before = x.slice();
    zeroPhase(lowpass(4, 30, 500), x);
    expect(x).toEqual(before);
  });

  it('is 3 dB down at its edge after both passes', () => {
    for (const order of [1, 2, 3, 4, 6, 8]) {
      for (const [edge, rate] of [
        [30, 200],
        [30, 256],
        [45, 500],
        [30, 1000],
        [90, 200],
      ] as const) {
        expect(relative(gainAt(zeroPhaseLowpass(order, edge, rate), edge, rate) ** 2, Math.SQRT1_2)).toBeLessThan(
          1e-12,
        );
      }
    }
  });
});

describeChecks('zero-phase filter against butter.filtfilt', () => {
  const Expected = Type.Object({
    at_cutoff_dB: Type.Number(),
    C: Type.Object({ N2_n2: Type.Number(), N4_n2: Type.Number() }),
    burst: Type.Object({ causal_peak: Type.Number(), filtfilt_peak: Type.Number() }),
  });

  it('moves the edge by the factor C on the prewarped frequency', () => {
    const { expected } = check('butter.filtfilt', Expected);
    for (const [order, factor] of [
      [2, expected.C.N2_n2],
      [4, expected.C.N4_n2],
    ] as const) {
      const moved = (Math.atan(Math.tan((Math.PI * 30) / 500) / factor) * 500) / Math.PI;
      expect(largestDifference(zeroPhaseLowpass(order, 30, 500), lowpass(order, moved, 500))).toBeLessThan(1e-12);
    }
    const uncorrected = 40 * Math.log10(gainAt(lowpass(4, 30, 500), 30, 500));
    expect(Math.abs(uncorrected - expected.at_cutoff_dB)).toBeLessThan(1e-9);
  });

  it('cuts the burst to the two peaks of the table', () => {
    const { expected, tolerance } = check('butter.filtfilt', Expected);
    const causal = new Float64Array(BURST.length);
    filterInto(createCascade(lowpass(4, 30, 500)), BURST, causal, 0, BURST.length);
    expect(relative(largestMagnitude(causal), expected.burst.causal_peak)).toBeLessThan(tolerance.rel);
    expect(
      relative(largestMagnitude(zeroPhase(lowpass(4, 30, 500), BURST)), expected.burst.filtfilt_peak),
    ).toBeLessThan(tolerance.rel);
  });
});

describe.skipIf(!available('python3-scipy'))('zero-phase filter against SciPy', () => {
  it('agrees with sosfiltfilt to 1e-9 of the largest value', () => {
    const designs = [
      lowpass(1, 30, 500),
      lowpass(4, 30, 500),
      lowpass(5, 45, 500),
      highpass(2, 0.5, 500),
      highpass(3, 1, 500),
      bandpass(4, 1, 30, 500),
    ];
    const rows = designs.map((sections) => {
      const list: number[][] = [];
      for (let i = 0; i < sections.length; i += 5)
        list.push([...sections.subarray(i, i + 3), 1, ...sections.subarray(i + 3, i + 5)]);
      return list;
    });
    const x = noise(createRandom(5), 2500).map((v, i) => v + 3 + 0.001 * i);
    const script = `output = [signal.sosfiltfilt(np.array(rows), np.array(input['x'])) for rows in input['rows']]`;
    const theirs = scipy(script, { x, rows }, Type.Array(Type.Array(Type.Number())));
    for (const [i, sections] of designs.entries()) {
      expect(
        largestDifference(zeroPhase(sections, x), theirs[i] ?? []) / largestMagnitude(theirs[i] ?? []),
      ).toBeLessThan(1e-9);
    }
  });
});
