import { describe, expect, it } from 'vitest';
import type { Day } from '#core/contract/api.ts';
import { dayLabels, dayTable, isDark, monthsOf, notesOf, rowsBefore } from '../../client/charts/day-rows.ts';
import {
  clockChange,
  hourOfDay,
  layoutOf,
  marksOf,
  midnight,
  monitoredShare,
  nearestMark,
  notYet,
  offsetMinutes,
  shiftDay,
} from '../../client/charts/days.ts';

const ZONE = 'Europe/Berlin';
const HOUR = 3_600_000_000;
const utc = (text: string): number => Date.parse(text) * 1000;

function day(name: string, marks: Day['marks'] = []): Day {
  return {
    day: name,
    startMicros: midnight(name, ZONE),
    endMicros: midnight(shiftDay(name, 1), ZONE),
    passages: marks.length,
    highest: null,
    above: { AL: 0, IL: 0, IAL: 0 },
    marks,
    noData: [],
  };
}

describe('the days of a clock change', () => {
  // Directive 2000/84/EC: clocks change at 01:00 UTC on the last Sundays of March and October.
  it('has 23 hours when clocks go forward, 25 when they go back, and says so', () => {
    const spring = day('2026-03-29');
    const autumn = day('2026-10-25');
    expect((spring.endMicros - spring.startMicros) / HOUR).toBe(23);
    expect((autumn.endMicros - autumn.startMicros) / HOUR).toBe(25);
    expect(clockChange(spring)).toBe('clocks forward 1 h');
    expect(clockChange(autumn)).toBe('clocks back 1 h');
    expect(clockChange(day('2026-07-01'))).toBeNull();
  });

  it('shows the hour on the wall before and after the change, so a timetable path stays one column', () => {
    expect(hourOfDay(day('2026-10-25'), utc('2026-10-24T23:30:00Z'), ZONE)).toBeCloseTo(1.5, 9);
    expect(hourOfDay(day('2026-10-25'), utc('2026-10-25T11:30:00Z'), ZONE)).toBeCloseTo(12.5, 9);
    expect(hourOfDay(day('2026-03-29'), utc('2026-03-29T10:30:00Z'), ZONE)).toBeCloseTo(12.5, 9);
    expect(hourOfDay(day('2026-07-01'), utc('2026-07-01T10:30:00Z'), ZONE)).toBeCloseTo(12.5, 9);
  });

  it('never leaves the strip, not even at the end of a day of 25 hours', () => {
    const autumn = day('2026-10-25');
    expect(hourOfDay(autumn, autumn.endMicros - 1, ZONE)).toBeLessThanOrEqual(24);
    expect(hourOfDay(autumn, autumn.startMicros, ZONE)).toBe(0);
  });
});

describe('local midnight', () => {
  it('is the instant the civil day begins, in summer, in winter, and where half hours count', () => {
    expect(midnight('2026-07-01', ZONE)).toBe(utc('2026-06-30T22:00:00Z'));
    expect(midnight('2026-12-01', ZONE)).toBe(utc('2026-11-30T23:00:00Z'));
    expect(midnight('2026-10-26', ZONE)).toBe(utc('2026-10-25T23:00:00Z'));
    expect(midnight('2026-12-01', 'Asia/Kolkata')).toBe(utc('2026-11-30T18:30:00Z'));
    expect(midnight('2026-12-01', 'UTC')).toBe(utc('2026-12-01T00:00:00Z'));
  });

  it('knows how far local time is ahead, also west of Greenwich', () => {
    expect(offsetMinutes(utc('2026-07-01T12:00:00Z'), ZONE)).toBe(120);
    expect(offsetMinutes(utc('2026-07-01T12:00:00Z'), 'America/St_Johns')).toBe(-150);
    expect(offsetMinutes(utc('2026-07-01T12:00:00Z'), 'UTC')).toBe(0);
  });

  it('goes from day to day over months and leap days', () => {
    expect(shiftDay('2026-03-01', -1)).toBe('2026-02-28');
    expect(shiftDay('2028-02-28', 1)).toBe('2028-02-29');
    expect(shiftDay('2026-12-31', 1)).toBe('2027-01-01');
  });
});

describe('marks', () => {
  const at = midnight('2026-07-01', ZONE);
  const marks = [
    { id: 'a', micros: at + 6 * HOUR, peak: 1.75, ofGravest: 0.5, severity: null },
    { id: 'b', micros: at + 12 * HOUR, peak: 7, ofGravest: 2, severity: 'IAL' as const },
    { id: 'c', micros: at + 18 * HOUR, peak: null, ofGravest: null, severity: null },
  ];
  const days = [day('2026-07-01', marks), day('2026-07-02')];

  it('is as high as its peak over the gravest limit, where a full row is that limit', () => {
    const layout = layoutOf(days, 1384, ZONE);
    expect(marksOf(days, layout).map(({ height }) => height)).toEqual([7.5, 22.5, expect.any(Number) as number]);
  });

  it('shows a passage whose peak is not measurable, too', () => {
    const layout = layoutOf(days, 1384, ZONE);
    expect(marksOf(days, layout)[2]!.height).toBeGreaterThanOrEqual(1);
  });

  it('stands at its hour of the day', () => {
    const layout = layoutOf(days, 1384, ZONE);
    const [a, b] = marksOf(days, layout);
    expect(b!.x).toBeCloseTo((layout.left + layout.right) / 2, 6);
    expect(a!.x).toBeCloseTo(layout.left + (layout.right - layout.left) / 4, 6);
  });

  it('is found under the pointer, and nothing is found far from any', () => {
    const layout = layoutOf(days, 1384, ZONE);
    const all = marksOf(days, layout);
    expect(nearestMark(all, layout, all[1]!.x + 3, layout.top + 8)?.id).toBe('b');
    expect(nearestMark(all, layout, all[1]!.x + 90, layout.top + 8)).toBeNull();
  });

  it('puts a year on one page', () => {
    const year = Array.from({ length: 365 }, (_, i) => day(shiftDay('2026-01-01', i)));
    const layout = layoutOf(year, 1384, ZONE);
    expect(layout.detail).toBe('months');
    expect(layout.height).toBeLessThan(1200);
  });
});

describe('the time before monitoring began', () => {
  const begun = { beganMicros: midnight('2026-07-02', ZONE) + 6 * HOUR };
  const days = [{ ...day('2026-07-01'), ...begun }, { ...day('2026-07-02'), ...begun }, day('2026-07-03')];

  it('is the whole of the days before, and part of the day on which it began', () => {
    const [first, second, third] = days.map(notYet);
    expect(first).toEqual({ fromMicros: days[0]!.startMicros, toMicros: days[0]!.endMicros });
    expect(second).toEqual({ fromMicros: days[1]!.startMicros, toMicros: begun.beganMicros });
    expect(third).toBeNull();
  });

  it('counts neither for nor against the share that was monitored', () => {
    const gap = (fromMicros: number, hours: number): Day['noData'] => [
      { fromMicros, toMicros: fromMicros + hours * HOUR },
    ];
    const late = days[2]!.endMicros;
    expect(monitoredShare(days, late)).toBe(1);
    // Of 18 h and 24 h since it began, 4.2 h were dark.
    const dark = days.map((each, i) => (i === 2 ? { ...each, noData: gap(each.startMicros + HOUR, 4.2) } : each));
    expect(monitoredShare(dark, late)).toBeCloseTo(1 - 4.2 / 42, 9);
    // Half of the last day is yet to come.
    expect(monitoredShare(dark, late - 12 * HOUR)).toBeCloseTo(1 - 4.2 / 30, 9);
    expect(monitoredShare(days.slice(0, 1), late)).toBeNull();
  });
});

describe('what stands beside the rows', () => {
  const dark = (name: string): Day => {
    const whole = day(name);
    return { ...whole, noData: [{ fromMicros: whole.startMicros, toMicros: whole.endMicros }] };
  };

  it('names the month on the first row, the first of a month, and on Mondays', () => {
    const labels = dayLabels(
      ['2026-08-29', '2026-08-30', '2026-08-31', '2026-09-01', '2026-09-02'].map((name) => day(name)),
    );
    expect(labels.map(({ weekday, date, month }) => `${weekday} ${date} ${month}`.trim())).toEqual([
      'Sat 29 Aug',
      'Sun 30',
      'Mon 31 Aug',
      'Tue 1 Sep',
      'Wed 2',
    ]);
    expect(labels.map(({ weekend }) => weekend)).toEqual([true, true, false, false, false]);
  });

  it('sums the days of each month, of which the first may be shown in part', () => {
    const days = ['2026-08-31', '2026-09-01', '2026-09-02'].map((name, i) => ({
      ...day(name),
      passages: i + 1,
      highest: i === 1 ? null : i + 0.5,
      above: { AL: i, IL: 0, IAL: i },
    }));
    expect(monthsOf(days)).toEqual([
      { name: 'Aug 2026', from: 0, rows: 1, passages: 1, highest: 0.5, above: { AL: 0, IL: 0, IAL: 0 } },
      { name: 'Sep 2026', from: 1, rows: 2, passages: 5, highest: 2.5, above: { AL: 3, IL: 0, IAL: 3 } },
    ]);
  });

  it('brackets dark days that follow one another into one note, and speaks of no day before monitoring began', () => {
    const begun = midnight('2026-07-02', ZONE);
    const early = { ...dark('2026-07-01'), beganMicros: begun };
    const part = {
      ...day('2026-07-05'),
      noData: [{ fromMicros: utc('2026-07-05T10:00:00Z'), toMicros: utc('2026-07-05T11:30:00Z') }],
    };
    const days = [early, day('2026-07-02'), dark('2026-07-03'), dark('2026-07-04'), part, dark('2026-07-06')];
    expect(days.map(isDark)).toEqual([true, false, true, true, false, true]);
    expect(rowsBefore(days)).toBe(1);
    expect(notesOf(days, 1)).toEqual([
      { row: 2, rows: 2, text: 'no data, 2 days' },
      { row: 4, rows: 1, text: 'no data 1.5 h' },
      { row: 5, rows: 1, text: 'no data, 1 day' },
    ]);
    expect(dayTable(days).rows.map((row) => row.slice(-2))).toEqual([
      [24, 24],
      [0, 0],
      [24, 0],
      [24, 0],
      [1.5, 0],
      [24, 0],
    ]);
  });
});
