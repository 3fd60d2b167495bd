import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { bandpass, gainAt, highpass, lowpass, type Sections } from '../../../server/core/signal/butterworth.ts';
import { createCascade, filterInto } from '../../../server/core/signal/cascade.ts';
import { zeroPhaseLowpass } from '../../../server/core/signal/zero-phase.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { largestDifference, largestMagnitude, relative } from './signals.ts';

type Kind = 'low' | 'high' | 'band';

function design(kind: Kind, order: number, edges: readonly number[], rateHz: number): Sections {
  const [first = NaN, second = NaN] = edges;
  if (kind === 'band') return bandpass(order, first, second, rateHz);
  return kind === 'low' ? lowpass(order, first, rateHz) : highpass(order, first, rateHz);
}

/** Numerator and denominator of the whole cascade. Only what does not depend on how gain is shared between sections. */
function polynomials(sections: Sections): { b: number[]; a: number[] } {
  let b = [1];
  let a = [1];
  for (let i = 0; i < sections.length; i += 5) {
    const [b0 = 0, b1 = 0, b2 = 0, a1 = 0, a2 = 0] = sections.subarray(i, i + 5);
    b = multiplied(b, [b0, b1, b2]);
    a = multiplied(a, [1, a1, a2]);
  }
  return { b, a };
}

function multiplied(p: readonly number[], q: readonly number[]): number[] {
  const product = new Array<number>(p.length + q.length - 1).fill(0);
  for (const [i, x] of p.entries()) for (const [j, y] of q.entries()) product[i + j] = (product[i + j] ?? 0) + x * y;
  return product;
}

function impulseResponse(sections: Sections, length: number): Float64Array {
  const x = new Float64Array(length);
  x[0] = 1;
  filterInto(createCascade(sections), x, x, 0, length);
  return x;
}

function poleRadius(a1: number, a2: number): number {
  return a2 > (a1 * a1) / 4 ? Math.sqrt(a2) : Math.abs(a1) / 2 + Math.sqrt((a1 * a1) / 4 - a2);
}

describe('Butterworth filters', () => {
  it('follow the closed form 1/√(1 + (Ω/Ωc)^2n) of the prewarped frequencies for orders 1 to 10', () => {
    for (let order = 1; order <= 10; order++) {
      for (const [edge, rate] of [
        [0.5, 500],
        [30, 200],
        [30, 500],
        [99, 200],
        [45, 2000],
      ] as const) {
        const warp = (hz: number): number => Math.tan((Math.PI * hz) / rate);
        for (const hz of [0.1 * edge, 0.7 * edge, edge, 1.4 * edge].filter((f) => f < rate / 2)) {
          const ratio = warp(hz) / warp(edge);
          const low = 1 / Math.sqrt(1 + ratio ** (2 * order));
          const high = 1 / Math.sqrt(1 + ratio ** (-2 * order));
          // rounding of coefficients is magnified by rate / edge squared in the sections' sums
          const tolerance = 1e-13 * Math.max(100, (rate / edge) ** 2);
          expect(relative(gainAt(lowpass(order, edge, rate), hz, rate), low)).toBeLessThan(tolerance);
          expect(relative(gainAt(highpass(order, edge, rate), hz, rate), high)).toBeLessThan(tolerance);
        }
      }
    }
  });

  it('follow the closed form in the band-pass too, also where the band is so wide that poles are real', () => {
    for (let order = 1; order <= 8; order++) {
      for (const [low, high, rate] of [
        [1, 30, 200],
        [4, 6, 500],
        [0.2, 90, 200],
      ] as const) {
        const warp = (hz: number): number => Math.tan((Math.PI * hz) / rate);
        const width = warp(high) - warp(low);
        const middle = warp(low) * warp(high);
        for (const hz of [0.5 * low, low, Math.sqrt(low * high), high, Math.min(1.5 * high, 0.499 * rate)]) {
          const ratio = (warp(hz) ** 2 - middle) / (width * warp(hz));
          const gain = 1 / Math.sqrt(1 + ratio ** (2 * order));
          expect(relative(gainAt(bandpass(order, low, high, rate), hz, rate), gain)).toBeLessThan(1e-8);
        }
      }
    }
  });

  it('have all poles inside the unit circle, nearest to it last, and gain 1 of each section in its pass band', () => {
    for (const order of [1, 2, 3, 4, 5, 8, 16]) {
      const sections = lowpass(order, 30, 500);
      let before = 0;
      for (let i = 0; i < sections.length; i += 5) {
        const row = sections.slice(i, i + 5);
        const radius = poleRadius(row[3] ?? NaN, row[4] ?? NaN);
        expect(radius).toBeLessThan(1);
        if (order % 2 === 0 || i > 0) expect(radius).toBeGreaterThan(before);
        before = radius;
        expect(gainAt(row, 0, 500)).toBeCloseTo(1, 10);
      }
      for (let i = 0; i < order; i++) {
        const row = bandpass(order, 1, 30, 200).slice(5 * i, 5 * i + 5);
        expect(poleRadius(row[3] ?? NaN, row[4] ?? NaN)).toBeLessThan(1);
      }
    }
  });

  it('stop 0 Hz exactly in a high-pass and a band-pass, half the rate exactly in a low-pass', () => {
    expect(gainAt(highpass(4, 0.5, 500), 0, 500)).toBe(0);
    expect(gainAt(bandpass(4, 1, 30, 200), 0, 200)).toBe(0);
    expect(gainAt(lowpass(4, 30, 200), 100, 200)).toBeLessThan(1e-15);
  });

  it('refuse orders and edges outside their ranges', () => {
    for (const order of [0, 2.5, 17, NaN]) expect(() => lowpass(order, 30, 200)).toThrow(RangeError);
    for (const edge of [0, -1, 100, 150, NaN]) {
      expect(() => lowpass(4, edge, 200)).toThrow(RangeError);
      expect(() => highpass(4, edge, 200)).toThrow(RangeError);
      expect(() => bandpass(4, 1, edge, 200)).toThrow(RangeError);
      expect(() => zeroPhaseLowpass(4, edge, 200)).toThrow(RangeError);
    }
    expect(() => bandpass(4, 30, 1, 200)).toThrow(RangeError);
    expect(() => bandpass(4, 30, 30, 200)).toThrow(RangeError);
  });
});

describeChecks('Butterworth filters against butter.* (SciPy 1.17 and closed forms)', () => {
  const Case = Type.Object({
    order: Type.Integer(),
    fc_Hz: Type.Union([Type.Number(), Type.Array(Type.Number())]),
    fs_Hz: Type.Number(),
    type: Type.Union([Type.Literal('low'), Type.Literal('high'), Type.Literal('band')]),
    b: Type.Array(Type.Number()),
    a: Type.Array(Type.Number()),
    impulse_first16: Type.Array(Type.Number()),
    gain_dB: Type.Record(Type.String(), Type.Number()),
  });

  it('have the transfer functions, impulse responses and gains of butter.coeffs', () => {
    const { expected } = check('butter.coeffs', Type.Array(Case));
    expect(expected.length).toBeGreaterThanOrEqual(6);
    for (const { order, fc_Hz, fs_Hz, type, b, a, impulse_first16, gain_dB } of expected) {
      const sections = design(type, order, typeof fc_Hz === 'number' ? [fc_Hz] : fc_Hz, fs_Hz);
      const ours = polynomials(sections);
      expect(largestDifference(ours.b.slice(0, b.length), b)).toBeLessThan(1e-12);
      expect(largestDifference(ours.a.slice(0, a.length), a)).toBeLessThan(1e-11);
      expect(largestDifference(impulseResponse(sections, 16), impulse_first16)).toBeLessThan(1e-12);
      for (const [hz, decibels] of Object.entries(gain_dB)) {
        expect(Math.abs(20 * Math.log10(gainAt(sections, Number(hz), fs_Hz)) - decibels)).toBeLessThan(1e-9);
      }
    }
  });

  it('have the coefficients worked by hand in butter.hand', () => {
    const Hand = Type.Object({ b0: Type.Number(), a1: Type.Number(), a2: Type.Number() });
    const { expected, tolerance } = check('butter.hand', Hand);
    const [b0 = NaN, , , a1 = NaN, a2 = NaN] = lowpass(2, 0.1, 1);
    expect(relative(b0, expected.b0)).toBeLessThan(tolerance.rel);
    expect(relative(a1, expected.a1)).toBeLessThan(tolerance.rel);
    expect(relative(a2, expected.a2)).toBeLessThan(tolerance.rel);
  });

  it('come to the analogue gains of butter.analog when the rate is high', () => {
    const { expected } = check('butter.analog', Type.Object({ gain: Type.Record(Type.String(), Type.Number()) }));
    for (const [hz, gain] of Object.entries(expected.gain)) {
      // prewarping leaves an error of order (π f / rate)²: 4e-6 at 60 Hz and 100 kHz
      expect(relative(gainAt(lowpass(4, 30, 100_000), Number(hz), 100_000), gain)).toBeLessThan(2e-5);
    }
  });
});

describe.skipIf(!available('python3-scipy'))('Butterworth filters against SciPy', () => {
  it('have the impulse responses of scipy.signal.butter for three kinds, orders 1 to 8 and five rates', () => {
    const cases: { kind: Kind; order: number; edges: number[]; rate: number }[] = [];
    for (let order = 1; order <= 8; order++) {
      for (const rate of [200, 256, 500, 1000, 2000]) {
        cases.push({ kind: 'low', order, edges: [45], rate }, { kind: 'high', order, edges: [0.5], rate });
        cases.push({ kind: 'band', order, edges: [2, 60], rate });
      }
    }
    const script = `
def response(case):
    wn = case['edges'][0] if len(case['edges']) == 1 else case['edges']
    sos = signal.butter(case['order'], wn, case['kind'], fs=case['rate'], output='sos')
    return signal.sosfilt(sos, np.eye(1, 400)[0])
output = [response(case) for case in input]
`;
    const theirs = scipy(script, cases, Type.Array(Type.Array(Type.Number())));
    for (const [i, { kind, order, edges, rate }] of cases.entries()) {
      const ours = impulseResponse(design(kind, order, edges, rate), 400);
      const scale = largestMagnitude(theirs[i] ?? []);
      // SciPy builds its sections from rounded roots; both are off by rounding times (rate / edge)^order at worst
      expect(largestDifference(ours, theirs[i] ?? []) / scale, `${kind} ${order} at ${rate} Hz`).toBeLessThan(1e-8);
    }
  });
});
