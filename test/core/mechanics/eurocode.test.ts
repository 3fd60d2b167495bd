import { Type } from 'typebox';
import { describe, expect, it } from 'vitest';
import { bandEdge, lowerBoundDampingPercent, naturalFrequencyBounds } from '#core/mechanics/eurocode.ts';
import { check, describeChecks } from '../../reference/checks.ts';

describeChecks('code values', () => {
  it('set the band edge as EN1990.band', () => {
    const { expected } = check(
      'EN1990.band',
      Type.Array(Type.Object({ f1: Type.Number(), f3: Type.Number(), limit_Hz: Type.Number() })),
    );
    for (const { f1, f3, limit_Hz } of expected) {
      expect(bandEdge({ frequenciesHz: { f1, f3 } }).upToHz).toBeCloseTo(limit_Hz, 9);
    }
  });

  it('bound natural frequencies as EN1991.n0.bounds', () => {
    const { expected } = check(
      'EN1991.n0.bounds',
      Type.Array(Type.Object({ L_m: Type.Number(), lower_Hz: Type.Number(), upper_Hz: Type.Number() })),
    );
    for (const { L_m, lower_Hz, upper_Hz } of expected) {
      const bounds = naturalFrequencyBounds(L_m)!;
      expect(Math.abs(bounds.lowerHz / lower_Hz - 1)).toBeLessThan(1e-7);
      expect(Math.abs(bounds.upperHz / upper_Hz - 1)).toBeLessThan(1e-7);
    }
  });

  it('bound damping from below as EN1991.damping.T66', () => {
    const structure = {
      steel_composite: 'steel trough',
      prestressed: 'prestressed concrete',
      filler_rc: 'filler beam',
    } as const;
    const { expected } = check(
      'EN1991.damping.T66',
      Type.Array(
        Type.Object({
          kind: Type.Union([Type.Literal('steel_composite'), Type.Literal('prestressed'), Type.Literal('filler_rc')]),
          L_m: Type.Number(),
          zeta_percent: Type.Number(),
        }),
      ),
    );
    for (const { kind, L_m, zeta_percent } of expected) {
      expect(lowerBoundDampingPercent(structure[kind], L_m)).toBeCloseTo(zeta_percent, 9);
    }
  });
});

describe('where the code is silent', () => {
  it('f3 is nine times f1, 30 Hz are left without both, and the reason is said', () => {
    expect(bandEdge({ frequenciesHz: { f1: 5.2 } })).toEqual({ upToHz: 46.8, setBy: 'f3 taken as 9 f1 = 46.8 Hz' });
    expect(bandEdge({})).toEqual({ upToHz: 30, setBy: '30 Hz, as neither f1 nor f3 is defined' });
    expect(bandEdge({ frequenciesHz: { f3: 40 } }).upToHz).toBe(40);
  });

  it('there is no value', () => {
    expect(naturalFrequencyBounds(3.9)).toBeNull();
    expect(naturalFrequencyBounds(101)).toBeNull();
    expect(naturalFrequencyBounds(NaN)).toBeNull();
    expect(lowerBoundDampingPercent('masonry arch', 10)).toBeNull();
  });
});
