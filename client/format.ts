import type { Measured } from '#core/contract/measure.ts';

/**
 * Figures as they are printed everywhere: the same quantity always with the same number of digits, a true minus sign,
 * no "−0.00". What is missing is said in words by the caller, never printed as zero.
 */
export function fixed(value: number, digits: number): string {
  const text = value.toFixed(digits);
  return Number(text) === 0 ? text.replace('-', '') : text.replace('-', '−');
}

/** With its sign, zero without one. `signed(0.014, 2) // '+0.01'` */
export function signed(value: number, digits: number): string {
  const text = fixed(value, digits);
  return Number(value.toFixed(digits)) > 0 ? `+${text}` : text;
}

export const DIGITS = {
  acceleration: 2,
  frequency: 2,
  speed: 1,
  damping: 1,
  temperature: 1,
  chainage: 3,
  strain: 0,
  length: 2,
} as const;

/** m/s², two decimals. */
export const acceleration = (value: number): string => fixed(value, DIGITS.acceleration);

/** Hz, two decimals. */
export const frequency = (valueHz: number): string => fixed(valueHz, DIGITS.frequency);

/** m/s, one decimal; a speed is printed without its direction. */
export const speed = (valueMs: number): string => fixed(Math.abs(valueMs), DIGITS.speed);

/** km/h, whole. */
export const kmh = (valueMs: number): string => fixed(Math.abs(valueMs) * 3.6, 0);

/** `44.2 m/s (159 km/h)` */
export const speedBoth = (valueMs: number): string => `${speed(valueMs)} m/s (${kmh(valueMs)} km/h)`;

/** Per cent with one decimal, of a damping ratio where 1 is critical. */
export const damping = (ratio: number): string => fixed(ratio * 100, DIGITS.damping);

/** °C, one decimal. */
export const temperature = (valueC: number): string => fixed(valueC, DIGITS.temperature);

/** km, three decimals: to the metre. */
export const chainage = (valueKm: number): string => fixed(valueKm, DIGITS.chainage);

/** A count with a thin gap between thousands: `12 480`. */
export function count(value: number): string {
  return String(Math.round(value)).replace(/\B(?=(\d{3})+(?!\d))/g, '\u2009');
}

/** `1 passage`, `3 passages`, `no passages` */
export function plural(value: number, one: string, many = `${one}s`): string {
  return value === 0 ? `no ${many}` : `${count(value)} ${value === 1 ? one : many}`;
}

/** Bytes in the unit that reads best, decimal as disks are sold. */
export function bytes(value: number): string {
  const units = ['B', 'kB', 'MB', 'GB', 'TB'];
  let unit = 0;
  let rest = value;
  while (rest >= 999.5 && unit < units.length - 1) {
    rest /= 1000;
    unit += 1;
  }
  return `${rest >= 100 || unit === 0 ? Math.round(rest) : rest.toPrecision(2)} ${units[unit]!}`;
}

/** Half the width of the 95 % interval of a value, or null where no error is known. 1.96 for a normal error. */
export function plusMinus(measured: Measured): number | null {
  return measured.value === null || measured.standardError === null ? null : 1.96 * measured.standardError;
}

/**
 * A measured value as figures and unit, or why there are none.
 *
 * @param print prints the bare number, one of the functions above
 */
export function measuredText(measured: Measured, print: (value: number) => string, unit: string): string {
  if (measured.value === null) return `not measurable: ${measured.reason}`;
  return `${print(measured.value)} ${unit}`;
}

/** `A, B and C` */
export function list(words: readonly string[]): string {
  if (words.length < 2) return words.join('');
  return `${words.slice(0, -1).join(', ')} and ${words[words.length - 1]!}`;
}
