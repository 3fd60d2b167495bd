import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';

/** Times as they are printed: UTC, and civil time in the bridge's own zone. */

const made = new Map<string, Intl.DateTimeFormat>();

/** Formatters are costly to make and are kept, one a zone and form. */
function formatter(zone: string, options: Intl.DateTimeFormatOptions): Intl.DateTimeFormat {
  const key = `${zone} ${JSON.stringify(options)}`;
  let found = made.get(key);
  if (!found) {
    found = new Intl.DateTimeFormat('en-GB', { timeZone: zone, hourCycle: 'h23', ...options });
    made.set(key, found);
  }
  return found;
}

const CLOCK = { hour: '2-digit', minute: '2-digit', second: '2-digit' } as const;
const SHORT_CLOCK = { hour: '2-digit', minute: '2-digit' } as const;
const DATE = { weekday: 'short', day: 'numeric', month: 'short', year: 'numeric' } as const;

/** A zone the browser does not know is taken as UTC; the definition's check refuses such zones before. */
export function zoneOf(timeZone: string | undefined): string {
  if (timeZone === undefined) return 'UTC';
  try {
    formatter(timeZone, CLOCK);
    return timeZone;
  } catch {
    return 'UTC';
  }
}

/** `14:32:07` */
export const clockIn = (micros: Micros, zone = 'UTC'): string => formatter(zone, CLOCK).format(micros / 1000);

/** `14:32:07.4`, tenths rounded down as in a passage's id. */
export function clockTenthsIn(micros: Micros, zone = 'UTC'): string {
  return `${clockIn(micros, zone)}.${Math.floor(micros / 100_000) % 10}`;
}

/** `14:32` */
export const minuteIn = (micros: Micros, zone = 'UTC'): string => formatter(zone, SHORT_CLOCK).format(micros / 1000);

/** `Tue 17 Feb 2026`; months have three letters, as columns of dates want them. */
export const dateIn = (micros: Micros, zone = 'UTC'): string =>
  formatter(zone, DATE)
    .format(micros / 1000)
    .replaceAll(',', '')
    .replace('Sept', 'Sep');

/** `2026-02-17`, the civil day in the zone. */
export function dayIn(micros: Micros, zone = 'UTC'): string {
  const parts = partsIn(micros, zone);
  return `${parts.year}-${parts.month}-${parts.day}`;
}

function partsIn(micros: Micros, zone: string): { year: string; month: string; day: string } {
  const form = formatter(zone, { year: 'numeric', month: '2-digit', day: '2-digit' });
  const parts = { year: '', month: '', day: '' };
  for (const { type, value } of form.formatToParts(micros / 1000)) {
    if (type === 'year' || type === 'month' || type === 'day') parts[type] = value;
  }
  return parts;
}

/** What stands beside a time of day in a zone: its name, or that it is the bridge's. */
export const zoneWord = (zone: string): 'UTC' | 'local' => (zone === 'UTC' ? 'UTC' : 'local');

/** `UTC+1`, `UTC−3:30`, `UTC`: how local time stands to UTC at that instant. */
export function offsetIn(micros: Micros, zone: string): string {
  const name = formatter(zone, { hour: '2-digit', timeZoneName: 'shortOffset' })
    .formatToParts(micros / 1000)
    .find(({ type }) => type === 'timeZoneName')?.value;
  return (name ?? 'UTC')
    .replace('GMT', 'UTC')
    .replace('-', '−')
    .replace(/^UTC\+0$/, 'UTC');
}

/**
 * A span of time in the two largest units that say something: `0.3 s`, `42 s`, `4 min 10 s`, `3 h 5 min`, `12 days`.
 *
 * @example span(250_000_000) // '4 min 10 s'
 */
export function span(micros: number): string {
  const seconds = Math.max(0, micros) / MICROS_PER_SECOND;
  if (seconds < 9.95) return `${seconds.toFixed(1)} s`;
  const whole = Math.round(seconds);
  if (whole < 60) return `${whole} s`;
  if (whole < 3600) return both(Math.floor(whole / 60), 'min', whole % 60, 's');
  const minutes = Math.round(whole / 60);
  if (minutes < 48 * 60) return both(Math.floor(minutes / 60), 'h', minutes % 60, 'min');
  return `${Math.round(minutes / 1440)} days`;
}

const both = (a: number, unitA: string, b: number, unitB: string): string =>
  b === 0 ? `${a} ${unitA}` : `${a} ${unitA} ${b} ${unitB}`;

/** `13 min ago`: one unit is enough for what lies behind. */
export function ago(micros: number): string {
  const seconds = Math.max(0, micros) / MICROS_PER_SECOND;
  if (seconds < 60) return `${Math.floor(seconds)} s ago`;
  if (seconds < 3600) return `${Math.floor(seconds / 60)} min ago`;
  if (seconds < 48 * 3600) return `${Math.floor(seconds / 3600)} h ago`;
  return `${Math.floor(seconds / 86_400)} days ago`;
}
