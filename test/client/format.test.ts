import { describe, expect, it } from 'vitest';
import {
  bytes,
  chainage,
  count,
  damping,
  fixed,
  kmh,
  list,
  measuredText,
  plural,
  plusMinus,
  signed,
  speedBoth,
} from '../../client/format.ts';

describe('figures', () => {
  it('carry a true minus sign, never a hyphen', () => {
    expect(fixed(-1.4, 1)).toBe('−1.4');
    expect(fixed(-1.4, 1)).not.toContain('-');
  });

  it('never print a negative zero', () => {
    expect(fixed(-0.004, 2)).toBe('0.00');
    expect(signed(-0.004, 2)).toBe('0.00');
  });

  it('carry a plus sign only where the printed figure is above zero', () => {
    expect(signed(0.014, 2)).toBe('+0.01');
    expect(signed(0.004, 2)).toBe('0.00');
    expect(signed(-0.014, 2)).toBe('−0.01');
  });

  it('keep the digits of their quantity', () => {
    expect(chainage(41.32)).toBe('41.320');
    expect(damping(0.0131)).toBe('1.3');
    expect(kmh(44.4)).toBe('160');
    expect(speedBoth(-44.2)).toBe('44.2 m/s (159 km/h)');
  });

  it('group thousands with a thin space', () => {
    expect(count(1_234_567)).toBe('1\u2009234\u2009567');
    expect(count(999)).toBe('999');
  });

  it('say none in words, one and many by number', () => {
    expect([plural(0, 'passage'), plural(1, 'passage'), plural(3, 'axle')]).toEqual([
      'no passages',
      '1 passage',
      '3 axles',
    ]);
  });

  it('write bytes in decimal units', () => {
    expect([bytes(0), bytes(999), bytes(1500), bytes(2.5e9), bytes(120e6)]).toEqual([
      '0 B',
      '999 B',
      '1.5 kB',
      '2.5 GB',
      '120 MB',
    ]);
  });

  it('join words as English does', () => {
    expect([list([]), list(['A']), list(['A', 'B']), list(['A', 'B', 'C'])]).toEqual([
      '',
      'A',
      'A and B',
      'A, B and C',
    ]);
  });
});

describe('a measured value', () => {
  it('is printed with its unit', () => {
    expect(measuredText({ value: 5.2, standardError: 0.01, quality: 'good' }, (v) => fixed(v, 2), 'Hz')).toBe(
      '5.20 Hz',
    );
  });

  it('that cannot be had says why and shows no number', () => {
    expect(measuredText({ value: null, reason: 'no free decay' }, (v) => fixed(v, 2), 'Hz')).toBe(
      'not measurable: no free decay',
    );
  });

  it('has 1.96 standard errors to each side of its 95 % interval, or none', () => {
    expect(plusMinus({ value: 1, standardError: 0.5, quality: 'good' })).toBeCloseTo(0.98, 12);
    expect(plusMinus({ value: 1, standardError: null, quality: 'good' })).toBeNull();
    expect(plusMinus({ value: null, reason: 'flat' })).toBeNull();
  });
});
