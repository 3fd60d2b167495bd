import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { coherentGain, enbw, hann, window, type WindowName } from '../../../server/core/signal/window.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { largestDifference, relative } from './signals.ts';

const NAMES: readonly WindowName[] = ['boxcar', 'hann', 'hamming', 'blackman', 'blackmanharris', 'flattop'];

describe('windows', () => {
  it('are symmetric about their middle, each form about its own', () => {
    for (const name of NAMES) {
      const symmetric = window(name, 33, 'symmetric');
      expect(largestDifference(symmetric, symmetric.slice().reverse())).toBeLessThan(1e-15);
      const periodic = window(name, 32, 'periodic');
      expect(largestDifference(periodic, symmetric.slice(0, 32))).toBeLessThan(1e-15);
    }
  });

  it('give a periodic Hann window whose half-overlapped copies add up to one', () => {
    const w = hann(64);
    const sums = w.slice(0, 32).map((v, i) => v + (w[i + 32] ?? NaN));
    expect(largestDifference(sums, new Float64Array(32).fill(1))).toBeLessThan(1e-15);
  });

  it('know a window of one sample, and refuse none or half a one', () => {
    expect([...window('flattop', 1)]).toEqual([1]);
    for (const n of [0, -1, 2.5, NaN]) expect(() => hann(n)).toThrow(RangeError);
  });

  it('have the Hann values in closed form', () => {
    expect(largestDifference(hann(4, 'symmetric'), [0, 0.75, 0.75, 0])).toBeLessThan(1e-15);
    expect(largestDifference(hann(4), [0, 0.5, 1, 0.5])).toBeLessThan(1e-15);
  });
});

describeChecks('windows against win.metrics (SciPy 1.17; Harris 1978, table 1)', () => {
  it('have the coherent gain and noise bandwidth of the table', () => {
    const Row = Type.Object({ coherent_gain: Type.Number(), enbw_bins: Type.Number() });
    const { expected, tolerance } = check(
      'win.metrics',
      Type.Object(Object.fromEntries(NAMES.map((name) => [name, Row]))),
    );
    for (const name of NAMES) {
      const w = window(name, 4096);
      const row = expected[name];
      expect(relative(coherentGain(w), row?.coherent_gain ?? NaN)).toBeLessThanOrEqual(tolerance.rel);
      expect(relative(enbw(w), row?.enbw_bins ?? NaN)).toBeLessThanOrEqual(tolerance.rel);
    }
  });
});

describe.skipIf(!available('python3-scipy'))('windows against SciPy', () => {
  it('agree with scipy.signal.get_window in both forms to 1e-14', () => {
    const script = `output = [[signal.get_window(name, 129, fftbins=periodic) for periodic in (True, False)] for name in input]`;
    const theirs = scipy(script, NAMES, Type.Array(Type.Array(Type.Array(Type.Number()))));
    for (const [i, name] of NAMES.entries()) {
      expect(largestDifference(window(name, 129, 'periodic'), theirs[i]?.[0] ?? [])).toBeLessThan(1e-14);
      expect(largestDifference(window(name, 129, 'symmetric'), theirs[i]?.[1] ?? [])).toBeLessThan(1e-14);
    }
  });
});
