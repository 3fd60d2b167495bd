/** Event time: integer microseconds since the Unix epoch (UTC, leap seconds smeared as the logger does). */
export type Micros = number;

export const MICROS_PER_SECOND = 1_000_000;

/** The oldest and newest sample times that are believed: 2000-01-01 and 2100-01-01. */
export const EARLIEST_MICROS: Micros = 946_684_800 * MICROS_PER_SECOND;
export const LATEST_MICROS: Micros = 4_102_444_800 * MICROS_PER_SECOND;

/**
 * Time of sample `index` of a run of evenly spaced samples, rounded to the microsecond.
 *
 * @param startMicros time of sample 0, µs since the epoch
 * @param index sample number, from 0
 * @param rateHz samples per second
 * @returns µs since the epoch
 * @example sampleMicros(1_000_000, 3, 256) // 1_011_719 (3/256 s = 11 718.75 µs)
 */
export function sampleMicros(startMicros: Micros, index: number, rateHz: number): Micros {
  return startMicros + Math.round((index * MICROS_PER_SECOND) / rateHz);
}

/**
 * A name that sorts by time and reads as one: `20261201-051233-2` for 05:12:33.2 UTC on 1 December 2026.
 *
 * @param micros a time, µs since the epoch; the name keeps tenths of a second, rounded down
 * @example timeName(1_764_565_953_250_000) // '20251201-051233-2'
 */
export function timeName(micros: Micros): string {
  const tenths = Math.floor(micros / 100_000);
  const { year, month, day, hour, minute, second } = civilTime(Math.floor(tenths / 10));
  const two = (n: number): string => String(n).padStart(2, '0');
  return `${year}${two(month)}${two(day)}-${two(hour)}${two(minute)}${two(second)}-${tenths % 10}`;
}

/**
 * Calendar date and time of a UTC instant, by Howard Hinnant's `civil_from_days` (proleptic Gregorian).
 *
 * @param seconds whole seconds since the Unix epoch
 * @example civilTime(951_782_400) // { year: 2000, month: 2, day: 29, hour: 0, minute: 0, second: 0 }
 */
export function civilTime(seconds: number): {
  year: number;
  month: number;
  day: number;
  hour: number;
  minute: number;
  second: number;
} {
  const days = Math.floor(seconds / 86_400);
  const ofDay = seconds - days * 86_400;
  const z = days + 719_468;
  const era = Math.floor(z / 146_097);
  const dayOfEra = z - era * 146_097;
  const yearOfEra = Math.floor(
    (dayOfEra - Math.floor(dayOfEra / 1460) + Math.floor(dayOfEra / 36_524) - Math.floor(dayOfEra / 146_096)) / 365,
  );
  const dayOfYear = dayOfEra - (365 * yearOfEra + Math.floor(yearOfEra / 4) - Math.floor(yearOfEra / 100));
  const shifted = Math.floor((5 * dayOfYear + 2) / 153);
  const month = shifted < 10 ? shifted + 3 : shifted - 9;
  return {
    year: yearOfEra + era * 400 + (month <= 2 ? 1 : 0),
    month,
    day: dayOfYear - Math.floor((153 * shifted + 2) / 5) + 1,
    hour: Math.floor(ofDay / 3600),
    minute: Math.floor((ofDay % 3600) / 60),
    second: ofDay % 60,
  };
}
