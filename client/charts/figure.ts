import { isLowerBound, type Measured } from '#core/contract/measure.ts';
import type { Micros } from '#core/contract/time.ts';
import { DIGITS, fixed } from '../format.ts';
import { dateIn } from '../time.ts';

/** How a kind of measure is printed. */
export interface Kind {
  unit: string;
  digits: number;
  /** Factor from the stored to the printed value. */
  factor: number;
}

export const KINDS = {
  acceleration: { unit: 'm/s²', digits: DIGITS.acceleration, factor: 1 },
  frequency: { unit: 'Hz', digits: DIGITS.frequency, factor: 1 },
  damping: { unit: '%', digits: DIGITS.damping, factor: 100 },
  speed: { unit: 'm/s', digits: DIGITS.speed, factor: 1 },
  temperature: { unit: '°C', digits: DIGITS.temperature, factor: 1 },
  count: { unit: '', digits: 0, factor: 1 },
} as const satisfies Record<string, Kind>;

/** @example withUnit(0.0132, KINDS.damping) // '1.3 %' */
export function withUnit(value: number, { unit, digits, factor }: Kind): string {
  return `${fixed(value * factor, digits)}${unit ? `\u00a0${unit}` : ''}`;
}

/** A measured value in print; a lower bound says so. `≥ 2.03 m/s²` */
export function valueText(measured: Measured, kind: Kind): string {
  if (measured.value === null) return 'not measurable';
  return `${isLowerBound(measured) ? '≥\u00a0' : ''}${withUnit(measured.value, kind)}`;
}

/**
 * Half the 95 % interval: 1.96 standard errors, the normal law's, to the place of its value's last digit and never finer
 * (JCGM 100:2008, 7.2.6); what is less than that digit is rounded up to it. Empty where no error can be given, as for a
 * lower bound.
 */
export function uncertainty(measured: Measured, { digits, factor }: Kind): string {
  if (measured.value === null || measured.standardError === null || isLowerBound(measured)) return '';
  const half = 1.96 * measured.standardError * factor;
  if (half === 0) return '';
  return `± ${Math.max(half, 10 ** -digits).toFixed(digits)}`;
}

/** `Tue 4 Nov`, for lists whose year is plain. */
export const shortDate = (micros: Micros, zone: string): string => dateIn(micros, zone).replace(/ \d{4}$/, '');
