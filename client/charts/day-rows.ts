import type { Day } from '#core/contract/api.ts';
import { SEVERITIES } from '#core/contract/severity.ts';
import { clockChange, notYet } from './days.ts';
import type { Table } from './table.ts';

const HOUR_MICROS = 3.6e9;

/** What stands at the left end of a day's row. */
export interface DayLabel {
  weekday: string;
  date: number;
  /** Named on the first row, the first of a month and on Mondays; otherwise empty. */
  month: string;
  weekend: boolean;
  sunday: boolean;
  /** The first row, or the first of a month. */
  first: boolean;
}

const WEEKDAYS = ['Sun', 'Mon', 'Tue', 'Wed', 'Thu', 'Fri', 'Sat'];
const MONTHS = ['Jan', 'Feb', 'Mar', 'Apr', 'May', 'Jun', 'Jul', 'Aug', 'Sep', 'Oct', 'Nov', 'Dec'];

const monthName = (day: string): string => MONTHS[Number(day.slice(5, 7)) - 1]!;

export function dayLabels(days: readonly Day[]): DayLabel[] {
  return days.map(({ day }, row) => {
    const date = new Date(`${day}T00:00:00Z`);
    const weekday = date.getUTCDay();
    const first = row === 0 || date.getUTCDate() === 1;
    return {
      weekday: WEEKDAYS[weekday]!,
      date: date.getUTCDate(),
      month: first || weekday === 1 ? monthName(day) : '',
      weekend: weekday === 0 || weekday === 6,
      sunday: weekday === 0,
      first,
    };
  });
}

/** The sums of the days of one month that are shown. */
export interface Month {
  name: string;
  /** Its first row, and how many it has. */
  from: number;
  rows: number;
  passages: number;
  highest: number | null;
  above: Day['above'];
}

/** Sums of each month, for the year's page. */
export function monthsOf(days: readonly Day[]): Month[] {
  const found: Month[] = [];
  days.forEach((day, row) => {
    const name = `${monthName(day.day)} ${day.day.slice(0, 4)}`;
    let month = found.at(-1);
    if (month?.name !== name) {
      month = { name, from: row, rows: 0, passages: 0, highest: null, above: { AL: 0, IL: 0, IAL: 0 } };
      found.push(month);
    }
    month.rows++;
    month.passages += day.passages;
    if (day.highest !== null) month.highest = Math.max(month.highest ?? 0, day.highest);
    for (const severity of SEVERITIES) month.above[severity] += day.above[severity];
  });
  return found;
}

/** Hours of a day without data. */
function darkHours({ noData }: Day): number {
  return noData.reduce((sum, { fromMicros, toMicros }) => sum + toMicros - fromMicros, 0) / HOUR_MICROS;
}

/** Whether a day is wholly without data. */
export function isDark(day: Day | undefined): boolean {
  return day !== undefined && darkHours(day) * HOUR_MICROS >= (day.endMicros - day.startMicros) * 0.999;
}

/** Rows of days wholly before monitoring began; they are the first. */
export function rowsBefore(days: readonly Day[]): number {
  return days.findLastIndex(({ beganMicros, endMicros }) => beganMicros !== undefined && beganMicros >= endMicros) + 1;
}

/** Written beside one or more rows. */
export interface DayNote {
  row: number;
  rows: number;
  text: string;
}

/** Notes beside the rows from `before` on; days wholly without data that follow one another share one note. */
export function notesOf(days: readonly Day[], before: number): DayNote[] {
  const found: DayNote[] = [];
  days.forEach((day, row) => {
    if (row < before) return;
    const change = clockChange(day);
    const last = found.at(-1);
    if (isDark(day) && last && last.row + last.rows === row && isDark(days[row - 1])) {
      last.rows += 1;
      last.text = `no data, ${last.rows} days`;
    } else if (isDark(day)) found.push({ row, rows: 1, text: 'no data, 1 day' });
    else if (change) found.push({ row, rows: 1, text: change });
    else if (darkHours(day) >= 0.25) found.push({ row, rows: 1, text: `no data ${darkHours(day).toFixed(1)} h` });
  });
  return found;
}

/** The strips as a table for those who do not see them. */
export function dayTable(days: readonly Day[]): Table {
  const columns = [
    'day',
    'passages',
    'highest, m/s²',
    'above AL',
    'above IL',
    'above IAL',
    'no data, h',
    'before monitoring began, h',
  ];
  const rows = days.map((day) => {
    const before = notYet(day);
    const beforeHours = before === null ? 0 : (before.toMicros - before.fromMicros) / HOUR_MICROS;
    return [
      day.day,
      day.passages,
      day.highest,
      day.above.AL,
      day.above.IL,
      day.above.IAL,
      Number(darkHours(day).toFixed(2)),
      Number(beforeHours.toFixed(2)),
    ];
  });
  return { columns, rows };
}
