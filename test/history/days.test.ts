import { describe, expect, test } from 'vitest';
import { civilDayAt, civilDays } from '../../server/history/days.ts';

const HOUR = 3600 * 1_000_000;
const at = (...parts: Parameters<typeof Date.UTC>): number => Date.UTC(...parts) * 1000;
const hours = (from: string, timeZone: string): number[] =>
  civilDays(from, from, timeZone).map(({ startMicros, endMicros }) => (endMicros - startMicros) / HOUR);

describe('civil days', () => {
  test('begin at local midnight', () => {
    expect(civilDays('2026-07-01', '2026-07-02', 'Europe/London')).toEqual([
      { day: '2026-07-01', startMicros: at(2026, 5, 30, 23), endMicros: at(2026, 6, 1, 23) },
      { day: '2026-07-02', startMicros: at(2026, 6, 1, 23), endMicros: at(2026, 6, 2, 23) },
    ]);
    expect(civilDays('2026-07-01', '2026-07-01', 'Asia/Kathmandu')[0]?.startMicros).toBe(at(2026, 5, 30, 18, 15));
    expect(civilDays('2026-07-01', '2026-07-01', 'Pacific/Kiritimati')[0]?.startMicros).toBe(at(2026, 5, 30, 10));
  });

  // Directive 2000/84/EC: summer time begins on the last Sunday of March and ends on the last Sunday of October, at 01:00 UTC.
  test('have 23 hours when clocks go forward and 25 when they go back', () => {
    for (const zone of ['Europe/London', 'Europe/Berlin', 'Europe/Helsinki']) {
      expect(hours('2026-03-28', zone)).toEqual([24]);
      expect(hours('2026-03-29', zone)).toEqual([23]);
      expect(hours('2026-10-25', zone)).toEqual([25]);
    }
    expect(hours('2026-03-29', 'UTC')).toEqual([24]);
    // Lord Howe Island moves by half an hour.
    expect(hours('2026-04-05', 'Australia/Lord_Howe')).toEqual([24.5]);
  });

  test('begin at the change where midnight itself is skipped, and at the first midnight where it comes twice', () => {
    // São Paulo 2018-11-04: 00:00 became 01:00 (−02:00), so the day began at 03:00 UTC and had 23 hours.
    expect(civilDays('2018-11-04', '2018-11-04', 'America/Sao_Paulo')).toEqual([
      { day: '2018-11-04', startMicros: at(2018, 10, 4, 3), endMicros: at(2018, 10, 5, 2) },
    ]);
    // Havana 2026-11-01: 01:00 became 00:00, midnight came at 04:00 UTC and again at 05:00.
    expect(civilDays('2026-11-01', '2026-11-01', 'America/Havana')).toEqual([
      { day: '2026-11-01', startMicros: at(2026, 10, 1, 4), endMicros: at(2026, 10, 2, 5) },
    ]);
    // Apia skipped the whole of 2011-12-30.
    expect(hours('2011-12-30', 'Pacific/Apia')).toEqual([0]);
  });

  test('follow each other without gap through a year in any zone', () => {
    for (const zone of ['Europe/London', 'America/Santiago', 'Africa/Cairo', 'Asia/Tehran', 'Pacific/Apia']) {
      const days = civilDays('2024-01-01', '2024-12-31', zone);
      expect(days).toHaveLength(366);
      for (const [i, { day, startMicros, endMicros }] of days.entries()) {
        expect(days[i + 1]?.startMicros ?? endMicros).toBe(endMicros);
        expect(civilDayAt(startMicros, zone)).toBe(day);
        expect(civilDayAt(endMicros - 1, zone)).toBe(day);
      }
    }
  });

  test('are at most 400, and must be days in a zone that exists', () => {
    expect(civilDays('2024-01-01', '2025-02-03', 'UTC')).toHaveLength(400);
    expect(civilDays('2024-01-02', '2024-01-01', 'UTC')).toEqual([]);
    const code = { code: 'REQUEST_INVALID' };
    expect(() => civilDays('2024-01-01', '2025-02-04', 'UTC')).toThrow(expect.objectContaining(code));
    expect(() => civilDays('2023-02-29', '2023-03-01', 'UTC')).toThrow(expect.objectContaining(code));
    expect(() => civilDays('yesterday', '2023-03-01', 'UTC')).toThrow(expect.objectContaining(code));
    expect(() => civilDays('2023-02-28', '2023-03-01', 'Middle/Earth')).toThrow(expect.objectContaining(code));
  });
});
