import { describe, expect, it } from 'vitest';
import { decimate, decimationLoss } from '../../../server/core/signal/decimate.ts';
import { kaiser } from '../../../server/core/signal/kaiser.ts';
import { decay, largestMagnitude, relative, sine } from './signals.ts';

describe('decimation', () => {
  it('passes a sine below its pass edge within its ripple and stops what would fold onto it by 50 dB', () => {
    const pass = decimate(sine(5000, 500, 8), 10, 10, 500).samples;
    // a −50 dB design has a ripple of 10^(−50/20) about the gain at 0 Hz, which may itself be off by as much
    expect(Math.abs(largestMagnitude(pass) - 1)).toBeLessThan(2 * 10 ** (-50 / 20));
    const folded = decimate(sine(5000, 500, 42), 10, 10, 500).samples;
    expect(largestMagnitude(folded)).toBeLessThan(10 ** (-49 / 20));
  });

  it('keeps an exponential exactly: each kept sample is the same multiple of the one before', () => {
    const x = Float64Array.from({ length: 1000 }, (_, i) => Math.exp(-0.004 * i));
    const { samples } = decimate(x, 5, 20, 500);
    for (let m = 1; m < samples.length; m++) {
      expect(relative((samples[m] ?? NaN) / (samples[m - 1] ?? NaN), Math.exp(-0.02))).toBeLessThan(1e-12);
    }
  });

  it('loses from the end of the record what it says', () => {
    const { samples, taps } = decimate(decay(1000, 500, [{ hz: 5, zeta: 0.01, amplitude: 1, phase: 0 }]), 4, 20, 500);
    expect(decimationLoss(20, 500, 4)).toBe((taps.length - 1) / 500);
    expect(samples).toHaveLength(Math.floor((1000 - taps.length) / 4) + 1);
    expect(decimate(new Float64Array(5), 4, 20, 500).samples).toHaveLength(0);
  });

  it('leaves a record as it is at factor 1', () => {
    const x = sine(10, 100, 3);
    expect(decimate(x, 1, 20, 100).samples).toBe(x);
    expect(decimationLoss(20, 100, 1)).toBe(0);
  });

  it('refuses a pass band that does not fit the new rate', () => {
    expect(() => decimate(new Float64Array(100), 10, 25, 500)).toThrow(RangeError);
  });
});

describe("Kaiser's window", () => {
  it('has the values of I0 from Abramowitz and Stegun, table 9.8', () => {
    // e^-x I0(x) in the table: x = 1: 0.46575960767, x = 5: 0.18354081261, x = 10: 0.12783333716
    for (const [x, value] of [
      [1, 0.46575960767],
      [5, 0.18354081261],
      [10, 0.12783333716],
    ] as const) {
      expect(Math.exp(-x) * kaiser(0, x)).toBeCloseTo(value, 9);
    }
    expect(kaiser(1, 7)).toBe(1);
    expect(kaiser(1.001, 7)).toBe(0);
    expect(kaiser(-0.5, 3)).toBe(kaiser(0.5, 3));
  });
});
