import { isLowerBound, type Measured } from '#core/contract/measure.ts';
import type { Micros } from '#core/contract/time.ts';
import { DIGITS, fixed, plural, plusMinus } from '../format.ts';
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

/** What stands before a value that is but a lower bound. */
export const AT_LEAST = '≥\u00a0';

/** A measured value in print; a lower bound says so. `≥ 2.03 m/s²` */
export function valueText(measured: Measured, kind: Kind): string {
  if (measured.value === null) return 'not measurable';
  return bare(measured, placesOf(measured, kind), kind.factor) + (kind.unit && `\u00a0${kind.unit}`);
}

/** The same for a column that names its unit. */
export function bare(measured: Measured, digits: number, factor = 1): string {
  if (measured.value === null) return 'n. m.';
  return `${isLowerBound(measured) ? AT_LEAST : ''}${fixed(measured.value * factor, digits)}`;
}

/** How many axles were counted: `32 axles`, `≥ 8 axles` of a train that was seen in part, null where none were counted. */
export function axlesText(counted: Measured): string | null {
  if (counted.value === null) return null;
  return `${isLowerBound(counted) ? AT_LEAST : ''}${plural(counted.value, 'axle')}`;
}

/**
 * Half the 95 % interval: 1.96 standard errors, the normal law's, with two significant digits at most, to the place of
 * its value's last digit (JCGM 100:2008, 7.2.6); what is less than that digit is rounded up to it. Empty where no error
 * can be given, as for a lower bound.
 */
export function uncertainty(measured: Measured, kind: Kind): string {
  const half = halfOf(measured, kind);
  const places = placesOf(measured, kind);
  return half === 0 ? '' : `± ${fixed(Math.max(half, 10 ** -places), places)}`;
}

function halfOf(measured: Measured, { factor }: Kind): number {
  return isLowerBound(measured) ? 0 : (plusMinus(measured) ?? 0) * factor;
}

/** Decimals of a value and of its uncertainty: those of its kind, fewer where the uncertainty leaves no sense in them. */
function placesOf(measured: Measured, kind: Kind): number {
  let places = kind.digits;
  while (places > 0 && halfOf(measured, kind) * 10 ** places >= 99.5) places -= 1;
  return places;
}

/** `Tue 4 Nov`, for lists whose year is plain. */
export const shortDate = (micros: Micros, zone: string): string => dateIn(micros, zone).replace(/ \d{4}$/, '');
