import { describe, expect, it } from 'vitest';
import { ago, clockIn, clockTenthsIn, dateIn, dayIn, offsetIn, span, zoneOf } from '../../client/time.ts';

/** 2026-03-29 00:59:59 UTC, a second before clocks go forward in Central Europe (Directive 2000/84/EC: 01:00 UTC). */
const BEFORE = Date.UTC(2026, 2, 29, 0, 59, 59) * 1000;
const AFTER = BEFORE + 1_000_000;

describe('times', () => {
  it('are printed in UTC unless a zone is named', () => {
    expect(clockIn(BEFORE)).toBe('00:59:59');
    expect(dateIn(BEFORE)).toBe('Sun 29 Mar 2026');
  });

  it('follow the bridge through a change of clocks', () => {
    expect(clockIn(BEFORE, 'Europe/Vienna')).toBe('01:59:59');
    expect(clockIn(AFTER, 'Europe/Vienna')).toBe('03:00:00');
    expect([offsetIn(BEFORE, 'Europe/Vienna'), offsetIn(AFTER, 'Europe/Vienna')]).toEqual(['UTC+1', 'UTC+2']);
  });

  it('name offsets with a true minus sign and with minutes', () => {
    expect(offsetIn(BEFORE, 'America/St_Johns')).toBe('UTC−2:30');
    expect(offsetIn(BEFORE, 'UTC')).toBe('UTC');
  });

  it('give the civil day of the zone, not that of UTC', () => {
    expect(dayIn(Date.UTC(2026, 11, 31, 23, 30) * 1000, 'Etc/GMT-1')).toBe('2027-01-01');
    expect(dayIn(Date.UTC(2026, 11, 31, 23, 30) * 1000)).toBe('2026-12-31');
  });

  it('show midnight as 00, never as 24', () => {
    expect(clockIn(Date.UTC(2026, 0, 1) * 1000)).toBe('00:00:00');
  });

  it('cut tenths as the ids of passages do', () => {
    expect(clockTenthsIn(BEFORE + 999_999)).toBe('00:59:59.9');
  });

  it('fall back to UTC for a zone that is unknown', () => {
    expect([zoneOf(undefined), zoneOf('Nowhere/Land'), zoneOf('Etc/GMT-1')]).toEqual(['UTC', 'UTC', 'Etc/GMT-1']);
  });
});

describe('spans of time', () => {
  it('use the two largest units that say something', () => {
    expect([0.31, 9.96, 42, 250, 3600 * 3 + 300, 3600 * 24 * 12].map((s) => span(s * 1e6))).toEqual([
      '0.3 s',
      '10 s',
      '42 s',
      '4 min 10 s',
      '3 h 5 min',
      '12 days',
    ]);
  });

  it('are never negative, whatever two clocks say', () => {
    expect(span(-5e6)).toBe('0.0 s');
    expect(ago(-5e6)).toBe('0 s ago');
  });

  it('in the past are told in one unit', () => {
    expect([42, 800, 7200, 3 * 86_400].map((s) => ago(s * 1e6))).toEqual([
      '42 s ago',
      '13 min ago',
      '2 h ago',
      '3 days ago',
    ]);
  });
});
