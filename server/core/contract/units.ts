import type { Quantity } from './bridge.ts';

/** SI unit in which each quantity lives inside the program, as printed. */
export const SI_UNIT: Readonly<Record<Quantity, string>> = {
  acceleration: 'm/s²',
  strain: 'µm/m',
  displacement: 'mm',
  temperature: '°C',
  'axle detector': '1',
};

/** Standard gravity, m/s², exact by the 3rd General Conference on Weights and Measures (1901). */
export const STANDARD_GRAVITY = 9.80665;

interface Conversion {
  quantity: Quantity;
  factor: number;
  shift: number;
}

const linear = (quantity: Quantity, factor: number, shift = 0): Conversion => ({ quantity, factor, shift });

/** Names as loggers write them, with the spellings of SenML (RFC 8428 section 12.1) among them. */
const CONVERSIONS: Readonly<Record<string, Conversion>> = {
  'm/s2': linear('acceleration', 1),
  'm/s²': linear('acceleration', 1),
  'mm/s2': linear('acceleration', 1e-3),
  g: linear('acceleration', STANDARD_GRAVITY),
  mg: linear('acceleration', STANDARD_GRAVITY / 1000),
  'um/m': linear('strain', 1),
  'µm/m': linear('strain', 1),
  'm/m': linear('strain', 1e6),
  mm: linear('displacement', 1),
  um: linear('displacement', 1e-3),
  m: linear('displacement', 1e3),
  Cel: linear('temperature', 1),
  '°C': linear('temperature', 1),
  K: linear('temperature', 1, -273.15),
  '1': linear('axle detector', 1),
  '/': linear('axle detector', 1),
  V: linear('axle detector', 1),
  mV: linear('axle detector', 1e-3),
};

/** The units a quantity may be sent in. */
export function unitsOf(quantity: Quantity): string[] {
  return Object.keys(CONVERSIONS).filter((unit) => CONVERSIONS[unit]?.quantity === quantity);
}

/**
 * Factor and shift that bring a value from a logger's unit to the program's: value × factor + shift.
 *
 * @returns null where the unit is unknown or belongs to another quantity
 * @example unitConversion('mg', 'acceleration') // { factor: 0.00980665, shift: 0 }
 */
export function unitConversion(unit: string, quantity: Quantity): { factor: number; shift: number } | null {
  const found = Object.hasOwn(CONVERSIONS, unit) ? CONVERSIONS[unit] : undefined;
  return found?.quantity === quantity ? { factor: found.factor, shift: found.shift } : null;
}
