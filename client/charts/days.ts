import type { Day } from '#core/contract/api.ts';
import type { Micros } from '#core/contract/time.ts';

/** Geometry of day strips: one row a day, 0 to 24 h of local time from left to right. */
export interface DayLayout {
  rowHeight: number;
  /** Pixels of the strip's left and right end, and of the first row's top. */
  left: number;
  right: number;
  top: number;
  /** Height of all rows. */
  height: number;
  /** How much stands beside a row. */
  detail: 'rows' | 'months';
  x(day: Day, micros: Micros): number;
  /** Foot of row `index`. */
  foot(index: number): number;
}

const HOUR_MICROS = 3_600_000_000;
const WIDE = 720;

export function layoutOf(days: readonly Day[], width: number, timeZone: string): DayLayout {
  const wide = width >= WIDE;
  const detail = days.length > 120 ? 'months' : 'rows';
  const rowHeight = detail === 'months' ? 3 : days.length > 62 ? 9 : 15;
  const left = wide ? 88 : 52;
  const right = width - (wide ? (width >= 1100 ? 300 : 232) : 46);
  const top = 26;
  return {
    rowHeight,
    left,
    right,
    top,
    height: days.length * rowHeight,
    detail,
    x: (day, micros) => left + (hourOfDay(day, micros, timeZone) / 24) * (right - left),
    foot: (index) => top + (index + 1) * rowHeight,
  };
}

/**
 * Hour of the local day, 0 to 24, as the clock on the wall shows it. On a day of a clock change the hours after
 * the change are moved by it, so that one timetable path stays one column.
 */
export function hourOfDay(day: Pick<Day, 'startMicros' | 'endMicros'>, micros: Micros, timeZone: string): number {
  const elapsed = (micros - day.startMicros) / HOUR_MICROS;
  const length = (day.endMicros - day.startMicros) / HOUR_MICROS;
  if (length === 24) return elapsed;
  const moved = (offsetMinutes(micros, timeZone) - offsetMinutes(day.startMicros, timeZone)) / 60;
  return Math.max(0, Math.min(24, elapsed + moved));
}

/** "clocks back 1 h" on a day of 25 hours, "clocks forward 1 h" on one of 23; null on all others. */
export function clockChange(day: Pick<Day, 'startMicros' | 'endMicros'>): string | null {
  const minutes = Math.round((day.endMicros - day.startMicros) / 60e6) - 24 * 60;
  if (minutes === 0) return null;
  const by = Math.abs(minutes) === 60 ? '1 h' : `${Math.abs(minutes)} min`;
  return `clocks ${minutes > 0 ? 'back' : 'forward'} ${by}`;
}

const formats = new Map<string, Intl.DateTimeFormat>();

/** How far local time is ahead of UTC at an instant, in minutes. */
export function offsetMinutes(micros: Micros, timeZone: string): number {
  let format = formats.get(timeZone);
  if (!format) {
    format = new Intl.DateTimeFormat('en-GB', { timeZone, timeZoneName: 'longOffset' });
    formats.set(timeZone, format);
  }
  const name = format.formatToParts(micros / 1000).find((part) => part.type === 'timeZoneName')?.value ?? 'GMT';
  const [, sign, hours, minutes] = /GMT([+\u2212-])(\d{2}):(\d{2})/.exec(name) ?? [];
  if (!sign) return 0;
  return (sign === '+' ? 1 : -1) * (Number(hours) * 60 + Number(minutes));
}

/** Of a day, the time before monitoring began: an empty row must not read as a quiet day. Null where there is none. */
export function notYet({ startMicros, endMicros, beganMicros }: Day): { fromMicros: Micros; toMicros: Micros } | null {
  if (beganMicros === undefined || beganMicros <= startMicros) return null;
  return { fromMicros: startMicros, toMicros: Math.min(beganMicros, endMicros) };
}

/**
 * The share of the time that was monitored, of the time since monitoring began; null where that has not begun.
 *
 * @param nowMicros what is yet to come counts neither way
 */
export function monitoredShare(days: readonly Day[], nowMicros: Micros): number | null {
  let whole = 0;
  let dark = 0;
  for (const day of days) {
    const from = notYet(day)?.toMicros ?? day.startMicros;
    const to = Math.max(from, Math.min(day.endMicros, nowMicros));
    whole += to - from;
    for (const gap of day.noData) dark += Math.max(0, Math.min(gap.toMicros, to) - Math.max(gap.fromMicros, from));
  }
  return whole > 0 ? 1 - dark / whole : null;
}

export interface Mark {
  id: string;
  row: number;
  x: number;
  /** Height of the mark: its peak over the gravest limit, where a full row is that limit. */
  height: number;
  mark: Day['marks'][number];
}

/** Where each passage's mark stands; a peak far above the limit ends one and a half rows up. */
export function marksOf(days: readonly Day[], layout: DayLayout): Mark[] {
  const { rowHeight } = layout;
  return days.flatMap((day, row) =>
    day.marks.map((mark) => ({
      id: mark.id,
      row,
      x: layout.x(day, mark.micros),
      height: Math.max(1, Math.min(1.5, mark.ofGravest ?? 0.07) * rowHeight),
      mark,
    })),
  );
}

/** The mark nearest a pixel, no further than a few rows or columns away. */
export function nearestMark(marks: readonly Mark[], layout: DayLayout, x: number, y: number): Mark | null {
  const row = Math.floor((y - layout.top) / layout.rowHeight);
  const reach = Math.max(1, Math.round(8 / layout.rowHeight));
  let best: Mark | null = null;
  let least = 24;
  for (const mark of marks) {
    if (Math.abs(mark.row - row) > reach) continue;
    const distance = Math.hypot(mark.x - x, (mark.row - row) * layout.rowHeight);
    if (distance < least) {
      least = distance;
      best = mark;
    }
  }
  return best;
}

/** Civil day `by` days later. `shiftDay('2026-03-01', -1) // '2026-02-28'` */
export function shiftDay(day: string, by: number): string {
  return new Date(Date.parse(`${day}T00:00:00Z`) + by * 86_400_000).toISOString().slice(0, 10);
}

/** The instant at which a civil day begins in a time zone. */
export function midnight(day: string, timeZone: string): Micros {
  const asUtc = Date.parse(`${day}T00:00:00Z`) * 1000;
  // The offset just before midnight may not be that of midnight; a second look settles it.
  const near = asUtc - offsetMinutes(asUtc, timeZone) * 60_000_000;
  return asUtc - offsetMinutes(near, timeZone) * 60_000_000;
}
