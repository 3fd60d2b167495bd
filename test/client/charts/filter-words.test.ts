import { describe, expect, it } from 'vitest';
import { daysTrouble, rangeTrouble } from '../../../client/charts/filter-words.ts';

describe('the filter of passages', () => {
  it.each([
    [undefined, undefined],
    [0, undefined],
    [undefined, 3.5],
    [2.2, 2.2],
  ])('takes a range from %s to %s', (low, high) => {
    expect(rangeTrouble(low, high)).toBe('');
  });

  it('says what is wrong with a range that holds nothing', () => {
    expect(rangeTrouble(3, 2)).toBe('From 3 is above 2; not used.');
    expect(rangeTrouble(-1, undefined)).toBe('Below zero; not used.');
    expect(rangeTrouble(undefined, NaN)).toBe('Not a number; not used.');
  });

  it('takes days in order, and says what else is wrong', () => {
    expect(daysTrouble('2026-11-30', '2026-12-01')).toBe('');
    expect(daysTrouble('2026-12-02', '2026-12-01')).toBe('The first day is after the last; not used.');
    expect(daysTrouble('', '2026-12-01')).toBe('Not a day; not used.');
  });
});
