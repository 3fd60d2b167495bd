import type { Measured } from '#core/contract/measure.ts';
import type { Micros } from '#core/contract/time.ts';

/** Figures as they are printed: true minus sign, the same digits for the same quantity everywhere. */

export interface Kind {
  unit: string;
  digits: number;
  /** Factor from the stored to the printed value. */
  factor: number;
}

export const KINDS = {
  acceleration: { unit: 'm/s²', digits: 2, factor: 1 },
  noise: { unit: 'm/s²', digits: 3, factor: 1 },
  frequency: { unit: 'Hz', digits: 2, factor: 1 },
  damping: { unit: '%', digits: 1, factor: 100 },
  speed: { unit: 'm/s', digits: 1, factor: 1 },
  temperature: { unit: '°C', digits: 1, factor: 1 },
  count: { unit: '', digits: 0, factor: 1 },
  seconds: { unit: 's', digits: 2, factor: 1 },
} as const satisfies Record<string, Kind>;

/** @example fixed(-0.125, 2) // '−0.13' */
export function fixed(value: number, digits: number): string {
  const text = value.toFixed(digits);
  // A rounded zero has no sign.
  return Number(text) === 0 ? text.replace('-', '') : text.replace('-', '\u2212');
}

/** With its sign, also where it is positive. */
export function signed(value: number, digits: number): string {
  const text = fixed(value, digits);
  return Number(value.toFixed(digits)) > 0 ? `+${text}` : text;
}

export function withUnit(value: number, { unit, digits, factor }: Kind): string {
  return `${fixed(value * factor, digits)}${unit ? `\u00a0${unit}` : ''}`;
}

/** Half the 95 % interval, ± 1.96 standard errors (normal law); empty where no error can be given. */
export function uncertainty(measured: Measured, { digits, factor }: Kind): string {
  if (measured.value === null || measured.standardError === null) return '';
  const half = 1.96 * measured.standardError * factor;
  if (half === 0) return '';
  const text = half.toFixed(digits);
  return `± ${Number(text) === 0 ? half.toPrecision(1) : text}`;
}

const formats = new Map<string, Intl.DateTimeFormat>();

function formatted(micros: Micros, timeZone: string, key: string, options: Intl.DateTimeFormatOptions): string {
  const name = `${key} ${timeZone}`;
  let format = formats.get(name);
  if (!format) {
    format = new Intl.DateTimeFormat('en-GB', { timeZone, hourCycle: 'h23', ...options });
    formats.set(name, format);
  }
  return format.format(micros / 1000).replaceAll(',', '');
}

/** `Tue 4 Nov 2025` */
export const longDay = (micros: Micros, timeZone: string): string =>
  formatted(micros, timeZone, 'long', { weekday: 'short', day: 'numeric', month: 'short', year: 'numeric' });

/** `Tue 4 Nov` */
export const shortDay = (micros: Micros, timeZone: string): string =>
  formatted(micros, timeZone, 'short', { weekday: 'short', day: 'numeric', month: 'short' });

/** `4 Nov 2025` */
export const dayAndYear = (micros: Micros, timeZone: string): string =>
  formatted(micros, timeZone, 'date', { day: 'numeric', month: 'short', year: 'numeric' });

/** `07:46` */
export const minuteOfDay = (micros: Micros, timeZone: string): string =>
  formatted(micros, timeZone, 'minute', { hour: '2-digit', minute: '2-digit' });

/** `07:46:12` */
export const secondOfDay = (micros: Micros, timeZone: string): string =>
  formatted(micros, timeZone, 'second', { hour: '2-digit', minute: '2-digit', second: '2-digit' });

/** `07:46:12.4` */
export const tenthOfDay = (micros: Micros, timeZone: string): string =>
  `${secondOfDay(micros, timeZone)}.${Math.floor(micros / 100_000) % 10}`;

/** How long ago, in the two largest units that matter: `42 s`, `14 min`, `3 h 05 min`, `6 d`. */
export function span(micros: number): string {
  const seconds = Math.max(0, Math.round(micros / 1e6));
  if (seconds < 90) return `${seconds}\u00a0s`;
  const minutes = Math.round(seconds / 60);
  if (minutes < 90) return `${minutes}\u00a0min`;
  const hours = Math.floor(minutes / 60);
  if (hours < 48) return `${hours}\u00a0h\u00a0${String(minutes % 60).padStart(2, '0')}\u00a0min`;
  return `${Math.round(hours / 24)}\u00a0d`;
}

/** `2 218`, groups of three parted by a narrow space. */
export const grouped = (count: number): string => String(count).replace(/\B(?=(\d{3})+$)/g, '\u202f');
