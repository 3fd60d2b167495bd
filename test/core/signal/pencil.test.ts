import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { shiftPoles, signalSubspace } from '../../../server/core/signal/pencil.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { decay, relative } from './signals.ts';

describe('poles by shift invariance', () => {
  it('are those of a noiseless sum of damped cosines, from one channel or several', () => {
    const modes = [
      { hz: 5, zeta: 0.012, amplitude: 1, phase: 0.4 },
      { hz: 7.6, zeta: 0.02, amplitude: 0.5, phase: -1.1 },
    ];
    const channels = [
      decay(200, 100, modes),
      decay(
        200,
        100,
        [...modes].reverse().map((m) => ({ ...m, phase: 2 * m.phase })),
      ),
    ];
    for (const records of [channels.slice(0, 1), channels]) {
      const poles = shiftPoles(signalSubspace(records, 0.01, 12), 4).sort((p, q) => p.omega - q.omega);
      expect(poles).toHaveLength(2);
      for (const [k, { alpha, omega }] of poles.entries()) {
        const { hz, zeta } = modes[k] ?? { hz: NaN, zeta: NaN };
        // the covariance squares the condition: half of the digits are left
        expect(relative(Math.hypot(alpha, omega), 2 * Math.PI * hz)).toBeLessThan(1e-6);
        expect(relative(alpha / Math.hypot(alpha, omega), zeta)).toBeLessThan(1e-4);
      }
    }
  });

  it('leave out real poles: a constant and a slow drift', () => {
    const x = Float64Array.from({ length: 200 }, (_, i) => 1 + Math.exp(-0.05 * i));
    expect(shiftPoles(signalSubspace([x], 0.01, 12), 2)).toEqual([]);
  });

  it('are none where the subspace is smaller than the rank asked for', () => {
    expect(shiftPoles(signalSubspace([new Float64Array(40)], 0.01, 12), 6).every((p) => Number.isFinite(p.omega))).toBe(
      true,
    );
  });
});

describeChecks('poles against id.prony2', () => {
  it('have the discrete poles of the table', () => {
    const Expected = Type.Object({
      discrete_poles: Type.Array(Type.Array(Type.Number())),
      y_first40: Type.Array(Type.Number()),
    });
    const { expected } = check('id.prony2', Expected);
    const poles = shiftPoles(signalSubspace([Float64Array.from(expected.y_first40)], 1, 4), 4).sort(
      (p, q) => p.omega - q.omega,
    );
    const upper = expected.discrete_poles.filter(([, im = 0]) => im > 0).sort(([a = 0], [b = 0]) => b - a);
    expect(upper).toHaveLength(2);
    for (const [k, [re = NaN, im = NaN]] of upper.entries()) {
      const { alpha = NaN, omega = NaN } = poles[k] ?? {};
      expect(Math.exp(-alpha) * Math.cos(omega)).toBeCloseTo(re, 5);
      expect(Math.exp(-alpha) * Math.sin(omega)).toBeCloseTo(im, 5);
    }
  });
});
