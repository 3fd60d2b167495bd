/**
 * Butterworth filters as cascades of second-order sections, by the bilinear transform with prewarped edges
 * (Oppenheim and Schafer, Discrete-Time Signal Processing, 3rd ed., section 7.2).
 *
 * A row of five numbers is one section: b0 b1 b2 a1 a2, with a0 = 1. First-order sections have b2 = a2 = 0.
 * Poles far from the unit circle come first, and each section has gain 1 in the pass band (at 0 Hz, at half the
 * rate, or at the middle of the band), so that no signal between sections grows out of scale.
 */
export type Sections = Float64Array;

/** Numbers in a row of `Sections`. */
export const SECTION_WIDTH = 5;

const HIGHEST_ORDER = 16;

/**
 * Low-pass with gain 1/√2 at its edge.
 *
 * @param order number of poles, 1 to 16
 * @param edgeHz −3 dB frequency, above 0 and below half the rate
 * @param rateHz samples per second
 * @returns ⌈order / 2⌉ sections
 * @throws RangeError where order or edge is outside its range
 * @example lowpass(2, 20, 200)[0] // 0.0674552738890719, as scipy.signal.butter(2, 0.2)
 */
export function lowpass(order: number, edgeHz: number, rateHz: number): Sections {
  checkOrder(order);
  const k = prewarped(edgeHz, rateHz);
  const rows: number[] = [];
  if (order % 2 === 1) rows.push(k / (1 + k), k / (1 + k), 0, (k - 1) / (k + 1), 0);
  for (const q of dampings(order)) {
    const d = 1 + q * k + k * k;
    const b = (k * k) / d;
    rows.push(b, 2 * b, b, (2 * (k * k - 1)) / d, (1 - q * k + k * k) / d);
  }
  return Float64Array.from(rows);
}

/**
 * High-pass with gain 1/√2 at its edge. Parameters, result and errors as in `lowpass`.
 *
 * @example highpass(2, 0.5, 200)[0] // 0.9889542480671399, as scipy.signal.butter(2, 0.005, 'high')
 */
export function highpass(order: number, edgeHz: number, rateHz: number): Sections {
  checkOrder(order);
  const k = prewarped(edgeHz, rateHz);
  const rows: number[] = [];
  if (order % 2 === 1) rows.push(1 / (1 + k), -1 / (1 + k), 0, (k - 1) / (k + 1), 0);
  for (const q of dampings(order)) {
    const d = 1 + q * k + k * k;
    rows.push(1 / d, -2 / d, 1 / d, (2 * (k * k - 1)) / d, (1 - q * k + k * k) / d);
  }
  return Float64Array.from(rows);
}

/**
 * Band-pass with gain 1/√2 at both edges. Of order n it has 2n poles and n sections, as SciPy counts.
 *
 * @param order 1 to 16
 * @param lowHz lower −3 dB frequency, above 0
 * @param highHz upper −3 dB frequency, above `lowHz` and below half the rate
 * @param rateHz samples per second
 * @returns `order` sections
 * @throws RangeError where order or edges are outside their range
 * @example gainAt(bandpass(4, 1, 30, 200), 30, 200) // 0.7071067811865476
 */
export function bandpass(order: number, lowHz: number, highHz: number, rateHz: number): Sections {
  checkOrder(order);
  if (!(lowHz < highHz)) throw new RangeError(`band edges ${lowHz} and ${highHz} Hz are not in rising order`);
  const low = prewarped(lowHz, rateHz);
  const high = prewarped(highHz, rateHz);
  const quadratics = bandQuadratics(order, high - low, low * high);
  const centre = Math.sqrt(low * high);

  // Zeros at 0 Hz go to the slow poles, zeros at half the rate to the fast ones: nearest together.
  quadratics.sort((p, q) => p.c0 - q.c0);
  const half = Math.floor(order / 2);
  const sections = quadratics.map((quadratic, i) =>
    bandSection(quadratic, i < half ? 'low zeros' : i >= order - half ? 'high zeros' : 'both', centre),
  );
  sections.sort((p, q) => (p[4] ?? 0) - (q[4] ?? 0));
  return Float64Array.from(sections.flat());
}

/**
 * Magnitude of the response of a cascade at one frequency (1 = unchanged).
 *
 * @param sections rows of b0 b1 b2 a1 a2
 * @param hz frequency, 0 to half the rate
 * @param rateHz samples per second
 * @example gainAt(lowpass(4, 30, 500), 30, 500) // 0.7071067811865476
 */
export function gainAt(sections: Sections, hz: number, rateHz: number): number {
  const angle = (2 * Math.PI * hz) / rateHz;
  const c1 = Math.cos(angle);
  const s1 = Math.sin(angle);
  const c2 = Math.cos(2 * angle);
  const s2 = Math.sin(2 * angle);
  let gain = 1;
  for (let i = 0; i < sections.length; i += SECTION_WIDTH) {
    const b0 = sections[i]!;
    const b1 = sections[i + 1]!;
    const b2 = sections[i + 2]!;
    const a1 = sections[i + 3]!;
    const a2 = sections[i + 4]!;
    const above = Math.hypot(b0 + b1 * c1 + b2 * c2, b1 * s1 + b2 * s2);
    gain *= above / Math.hypot(1 + a1 * c1 + a2 * c2, a1 * s1 + a2 * s2);
  }
  return gain;
}

/** The analogue frequency, in the plane s = (z − 1) / (z + 1), that the bilinear transform brings to `edgeHz`. */
function prewarped(edgeHz: number, rateHz: number): number {
  if (!(edgeHz > 0 && edgeHz < rateHz / 2)) {
    throw new RangeError(`edge ${edgeHz} Hz is not between 0 and half the rate of ${rateHz} Hz`);
  }
  return Math.tan((Math.PI * edgeHz) / rateHz);
}

function checkOrder(order: number): void {
  if (!Number.isInteger(order) || order < 1 || order > HIGHEST_ORDER) {
    throw new RangeError(`order ${order} is not a whole number from 1 to ${HIGHEST_ORDER}`);
  }
}

/** Factors q of the prototype's quadratics s² + q s + 1, most damped first. */
function dampings(order: number): number[] {
  const pairs = Math.floor(order / 2);
  return Array.from({ length: pairs }, (_, i) => 2 * Math.sin((Math.PI * (2 * (pairs - i) - 1)) / (2 * order)));
}

/** s² + c1 s + c0 */
interface Quadratic {
  c1: number;
  c0: number;
}

/** Denominators of the analogue band-pass: each prototype pole p goes to the roots of s² − p·width·s + w0². */
function bandQuadratics(order: number, width: number, centreSquared: number): Quadratic[] {
  const quadratics: Quadratic[] = [];
  if (order % 2 === 1) quadratics.push({ c1: width, c0: centreSquared });
  for (const q of dampings(order)) {
    const re = (-q * width) / 4;
    const im = (Math.sqrt(4 - q * q) * width) / 4;
    // half ± √(half² − w0²), with half = re + i·im; the root's real part is the smaller one in magnitude
    const a = re * re - im * im - centreSquared;
    const b = 2 * re * im;
    const r = Math.hypot(a, b);
    const rootIm = Math.sqrt((r - a) / 2);
    const rootRe = b / (2 * rootIm);
    for (const sign of [1, -1]) {
      const x = re + sign * rootRe;
      const y = im + sign * rootIm;
      quadratics.push({ c1: -2 * x, c0: x * x + y * y });
    }
  }
  return quadratics;
}

function bandSection({ c1, c0 }: Quadratic, zeros: 'low zeros' | 'high zeros' | 'both', centre: number): number[] {
  const d = 1 + c1 + c0;
  const magnitude = Math.hypot(c0 - centre * centre, c1 * centre);
  const poles = [(2 * (c0 - 1)) / d, (1 - c1 + c0) / d];
  if (zeros === 'both') {
    const g = magnitude / centre / d;
    return [g, 0, -g, ...poles];
  }
  if (zeros === 'low zeros') {
    const g = magnitude / (centre * centre) / d;
    return [g, -2 * g, g, ...poles];
  }
  const g = magnitude / d;
  return [g, 2 * g, g, ...poles];
}
