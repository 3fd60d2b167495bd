import { LATEST_MICROS, EARLIEST_MICROS, MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { decimalAt } from './decimal.ts';

/** How the time column of a recording is written; settled on its first value. */
export interface TimeReading {
  kind: 'calendar' | 'number';
  /** Length of one unit of a number. */
  unitMicros: number;
  /** Added to a number: the start of a recording that counts from zero. */
  originMicros: Micros;
  decimalComma: boolean;
  /** Most decimals seen so far: how finely the stamps are written. */
  decimals: number;
}

const UNITS: Readonly<Record<string, number>> = {
  s: MICROS_PER_SECOND,
  sec: MICROS_PER_SECOND,
  seconds: MICROS_PER_SECOND,
  ms: 1000,
  us: 1,
  µs: 1,
  μs: 1,
  ns: 1e-3,
};

/**
 * Settles how times are written, on the first of them.
 *
 * A number is an epoch where it falls between 2000 and 2100 in seconds, milli-, micro- or nanoseconds; else it counts
 * seconds (or the unit of the header) from `startMicros`.
 *
 * @returns null where the value is no time; 'no start' where it counts from a start that nobody gave
 */
export function settleTime(
  bytes: Uint8Array,
  from: number,
  to: number,
  hint: { unit: string | null; startMicros: Micros | null; decimalComma: boolean },
): TimeReading | 'no start' | null {
  const base = { originMicros: 0, decimalComma: hint.decimalComma, decimals: 0 };
  if (!Number.isNaN(calendarMicros(bytes, from, to))) return { ...base, kind: 'calendar', unitMicros: 1 };
  const value = decimalAt(bytes, from, to, hint.decimalComma);
  if (value === null || value === undefined || Number.isNaN(value)) return null;
  const named = hint.unit === null ? undefined : UNITS[hint.unit.toLowerCase()];
  for (const unitMicros of named === undefined ? [1e6, 1e3, 1, 1e-3] : [named]) {
    const micros = value * unitMicros;
    if (micros >= EARLIEST_MICROS && micros <= LATEST_MICROS) return { ...base, kind: 'number', unitMicros };
  }
  if (hint.startMicros === null) return 'no start';
  return { ...base, kind: 'number', unitMicros: named ?? MICROS_PER_SECOND, originMicros: hint.startMicros };
}

/** @returns µs since the epoch, not yet rounded; NaN for what is no time */
export function timeAt(reading: TimeReading, bytes: Uint8Array, from: number, to: number): number {
  const decimals = decimalsOf(bytes, from, to);
  if (decimals > reading.decimals) reading.decimals = decimals;
  if (reading.kind === 'calendar') return calendarMicros(bytes, from, to);
  const value = decimalAt(bytes, from, to, reading.decimalComma);
  return value === null || value === undefined ? NaN : reading.originMicros + value * reading.unitMicros;
}

/** The step between neighbouring stamps that can be told apart, µs. */
export function resolutionMicros({ kind, unitMicros, decimals }: TimeReading): number {
  return (kind === 'calendar' ? MICROS_PER_SECOND : unitMicros) / 10 ** decimals;
}

/** Digits behind the last mark; an exponent counts as fine. */
function decimalsOf(bytes: Uint8Array, from: number, to: number): number {
  let digits = 0;
  let marked = false;
  for (let at = from; at < to; at++) {
    const byte = bytes[at]!;
    if (byte === 46 || byte === 44) {
      marked = true;
      digits = 0;
    } else if (byte >= 48 && byte <= 57) {
      if (marked) digits++;
    } else if (byte === 101 || byte === 69) return 9;
  }
  return digits;
}

/**
 * `2026-12-01T05:12:33.25Z`, with a space for the T, with `+01:00`, without seconds; and `01.12.2026 05:12:33,25`.
 * Without a zone the time is UTC. NaN for anything else.
 */
export function calendarMicros(bytes: Uint8Array, from: number, to: number): number {
  let at = from;
  let end = to;
  while (at < end && (bytes[at] === 32 || bytes[at] === 34)) at++;
  while (end > at && (bytes[end - 1] === 32 || bytes[end - 1] === 34)) end--;
  if (end - at < 16) return NaN;
  const number = (start: number, length: number): number => {
    let value = 0;
    for (let i = start; i < start + length; i++) {
      const digit = bytes[i]! - 48;
      // also false beyond the end, where the byte is undefined
      if (!(digit >= 0 && digit <= 9)) return NaN;
      value = value * 10 + digit;
    }
    return value;
  };
  const german = bytes[at + 2] === 46 && bytes[at + 5] === 46;
  if (!german && !(bytes[at + 4] === 45 && bytes[at + 7] === 45)) return NaN;
  const [year, month, day] = german
    ? [number(at + 6, 4), number(at + 3, 2), number(at, 2)]
    : [number(at, 4), number(at + 5, 2), number(at + 8, 2)];
  if (bytes[at + 10] !== 84 && bytes[at + 10] !== 116 && bytes[at + 10] !== 32) return NaN;
  if (bytes[at + 13] !== 58) return NaN;
  const minutes = number(at + 11, 2) * 60 + number(at + 14, 2);
  at += 16;
  let seconds = 0;
  if (bytes[at] === 58) {
    seconds = number(at + 1, 2);
    at += 3;
    if (bytes[at] === 46 || bytes[at] === 44) {
      let scale = 0.1;
      for (at++; at < end && bytes[at]! >= 48 && bytes[at]! <= 57; at++) {
        seconds += (bytes[at]! - 48) * scale;
        scale /= 10;
      }
    }
  }
  const zone = zoneMinutes(bytes, at, end, number);
  if (!(month >= 1 && month <= 12 && day >= 1 && day <= 31 && minutes < 1440 && seconds < 61)) return NaN;
  const wholeSeconds = (dayNumber(year, month, day) * 1440 + minutes - zone) * 60;
  return wholeSeconds * MICROS_PER_SECOND + Math.round(seconds * MICROS_PER_SECOND);
}

function zoneMinutes(
  bytes: Uint8Array,
  at: number,
  end: number,
  number: (at: number, length: number) => number,
): number {
  if (at === end) return 0;
  if ((bytes[at] === 90 || bytes[at] === 122) && at + 1 === end) return 0;
  const sign = bytes[at] === 43 ? 1 : bytes[at] === 45 ? -1 : NaN;
  const colon = bytes[at + 3] === 58 ? 1 : 0;
  const minutes = at + 3 === end ? 0 : at + 5 + colon === end ? number(at + 3 + colon, 2) : NaN;
  return sign * (number(at + 1, 2) * 60 + minutes);
}

/** Days since 1 January 1970, by Howard Hinnant's `days_from_civil`. */
function dayNumber(year: number, month: number, day: number): number {
  const y = month <= 2 ? year - 1 : year;
  const era = Math.floor(y / 400);
  const yearOfEra = y - era * 400;
  const dayOfYear = Math.floor((153 * (month + (month > 2 ? -3 : 9)) + 2) / 5) + day - 1;
  const dayOfEra = yearOfEra * 365 + Math.floor(yearOfEra / 4) - Math.floor(yearOfEra / 100) + dayOfYear;
  return era * 146_097 + dayOfEra - 719_468;
}
