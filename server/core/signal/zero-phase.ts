import { lowpass, SECTION_WIDTH, type Sections } from './butterworth.ts';
import { createCascade, filterInto, settleAt } from './cascade.ts';

/**
 * Filters forwards, then backwards: no delay, twice the attenuation. At the ends the record is continued by its
 * point reflection and the memory is settled on the first value, as in scipy.signal.sosfiltfilt.
 *
 * @param sections rows of b0 b1 b2 a1 a2
 * @param x the whole record; not changed
 * @param pad samples of continuation at each end; by default SciPy's 3 × (2 × sections + 1), one per first-order
 *   section less; never more than `x.length - 1`
 * @returns a new array as long as `x`
 * @example zeroPhase(lowpass(2, 20, 200), Float64Array.of(1, 1, 1)) // 1, 1, 1
 */
export function zeroPhase(sections: Sections, x: Float64Array, pad: number = usualPad(sections)): Float64Array {
  const n = x.length;
  if (n === 0) return new Float64Array(0);
  const edge = Math.min(pad, n - 1);
  const extended = pointReflected(x, edge);
  const cascade = createCascade(sections);
  settleAt(cascade, extended[0]!);
  filterInto(cascade, extended, extended, 0, extended.length);
  extended.reverse();
  settleAt(cascade, extended[0]!);
  filterInto(cascade, extended, extended, 0, extended.length);
  extended.reverse();
  return extended.slice(edge, edge + n);
}

/**
 * Low-pass for `zeroPhase` whose two passes together are 3 dB down at `edgeHz`. Two passes of an ordinary design
 * would be 6 dB down there; the edge is moved out by C = (√2 − 1)^(1/2N), applied to the prewarped frequency.
 *
 * @param order poles of a single pass, 1 to 16
 * @param edgeHz −3 dB frequency of the double pass, above 0 and below half the rate
 * @param rateHz samples per second
 * @throws RangeError as `lowpass`
 * @example gainAt(zeroPhaseLowpass(4, 30, 500), 30, 500) ** 2 // 0.7071067811865476
 */
export function zeroPhaseLowpass(order: number, edgeHz: number, rateHz: number): Sections {
  const correction = (Math.SQRT2 - 1) ** (1 / (2 * order));
  const warped = Math.tan((Math.PI * edgeHz) / rateHz) / correction;
  // A negative or infinite tangent (edge outside the range) must not come back as a valid edge.
  const within = edgeHz > 0 && edgeHz < rateHz / 2;
  return lowpass(order, within ? (Math.atan(warped) * rateHz) / Math.PI : edgeHz, rateHz);
}

function usualPad(sections: Sections): number {
  let zerosAtOrigin = 0;
  let polesAtOrigin = 0;
  for (let i = 0; i < sections.length; i += SECTION_WIDTH) {
    if (sections[i + 2] === 0) zerosAtOrigin++;
    if (sections[i + 4] === 0) polesAtOrigin++;
  }
  return 3 * ((2 * sections.length) / SECTION_WIDTH + 1 - Math.min(zerosAtOrigin, polesAtOrigin));
}

function pointReflected(x: Float64Array, edge: number): Float64Array {
  const n = x.length;
  const extended = new Float64Array(n + 2 * edge);
  extended.set(x, edge);
  const first = x[0]!;
  const last = x[n - 1]!;
  for (let i = 1; i <= edge; i++) {
    extended[edge - i] = 2 * first - x[i]!;
    extended[edge + n - 1 + i] = 2 * last - x[n - 1 - i]!;
  }
  return extended;
}
