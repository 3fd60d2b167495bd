import { describe, expect, it } from 'vitest';
import { createPulseFinder, findPulses } from '#core/passage/pulse.ts';
import { createRandom } from '../../support/random.ts';

const RATE_HZ = 500;

/** Strain of a rail gauge: noise of 1 µm/m, 40 µm/m offset, a bump of 60 µm/m and 25 ms as each axle passes, and more. */
function gauge(seconds: number, axles: readonly number[], more: (t: number) => number = () => 0): Float32Array {
  const random = createRandom(1);
  return Float32Array.from({ length: seconds * RATE_HZ }, (_, i) => {
    const t = i / RATE_HZ;
    let x = 40 + random.normal() + more(t);
    for (const axle of axles) x += 60 * Math.exp(-(((t - axle) / 0.025) ** 2));
    return x;
  });
}

function pulsesOf(x: Float32Array): number[] {
  const finder = createPulseFinder();
  const times: number[] = [];
  findPulses(finder, x, 0, x.length, RATE_HZ, (index) => times.push(index / RATE_HZ));
  return times;
}

describe('live axle pulses', () => {
  it('are told at their crests, between samples', () => {
    const axles = [3, 3.1, 3.7, 3.8];
    const found = pulsesOf(gauge(6, axles));
    expect(found).toHaveLength(4);
    found.forEach((t, i) => expect(Math.abs(t - axles[i]!)).toBeLessThan(0.006));
  });

  it('are not found in noise, in an offset or in slow drift', () => {
    expect(pulsesOf(gauge(60, [], (t) => 0.2 * t))).toEqual([]);
  });

  it('are heard again after a wheel has stood beside the gauge for a minute', () => {
    // A few axles, then a wheel that creeps up to the gauge, half of it felt, and rests; then the rest of the train.
    const standing = (t: number): number => (t > 10 && t < 70 ? Math.min(30, 2 * (t - 10)) : 0);
    const axles = [5, 5.3, 7, 7.4, 72, 72.3, 74, 74.2, 75.8, 76, 77.5, 77.7];
    const found = pulsesOf(gauge(80, axles, standing));
    // The wheel at rest is one axle at most, told when it has gone.
    const resting = found.filter((t) => t > 8 && t < 71);
    expect(resting.length).toBeLessThanOrEqual(1);
    expect(found).toHaveLength(axles.length + resting.length);
  });
});
