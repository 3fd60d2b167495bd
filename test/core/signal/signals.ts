import type { Random } from '../../support/random.ts';

/** A mode as the tests state it: undamped natural frequency, ratio of critical damping, amplitude, phase in rad. */
export interface TrueMode {
  hz: number;
  zeta: number;
  amplitude: number;
  phase: number;
}

/** offset + Σ A e^(−ζωt) cos(ω√(1−ζ²) t + phase), the closed form of a free decay. */
export function decay(length: number, rateHz: number, modes: readonly TrueMode[], offset = 0): Float64Array {
  return Float64Array.from({ length }, (_, i) => {
    const t = i / rateHz;
    let sum = offset;
    for (const { hz, zeta, amplitude, phase } of modes) {
      const omega = 2 * Math.PI * hz;
      sum += amplitude * Math.exp(-zeta * omega * t) * Math.cos(omega * Math.sqrt(1 - zeta * zeta) * t + phase);
    }
    return sum;
  });
}

export function sine(length: number, rateHz: number, hz: number, amplitude = 1, phase = 0): Float64Array {
  return Float64Array.from({ length }, (_, i) => amplitude * Math.sin((2 * Math.PI * hz * i) / rateHz + phase));
}

/** Adds white noise of the given standard deviation to a copy. */
export function withNoise(x: Float64Array, random: Random, deviation: number): Float64Array {
  return x.map((v) => v + deviation * random.normal());
}

export function largestDifference(x: ArrayLike<number>, y: ArrayLike<number>): number {
  if (x.length !== y.length) return Infinity;
  let largest = 0;
  for (let i = 0; i < x.length; i++) {
    const difference = Math.abs((x[i] ?? NaN) - (y[i] ?? NaN));
    if (!(difference <= largest)) largest = difference;
  }
  return largest;
}

export function largestMagnitude(x: ArrayLike<number>): number {
  return largestDifference(x, new Float64Array(x.length));
}

export function energy(x: Float64Array): number {
  return x.reduce((sum, v) => sum + v * v, 0);
}

/** Relative difference, for values away from zero. */
export function relative(found: number, expected: number): number {
  return Math.abs(found / expected - 1);
}
