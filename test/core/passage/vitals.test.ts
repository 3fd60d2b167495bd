import { describe, expect, it } from 'vitest';
import type { Sensor } from '#core/contract/bridge.ts';
import { createVitals, watchVitals } from '#core/passage/vitals.ts';
import { createRandom } from '../../support/random.ts';

const RATE = 100;
const SENSOR: Sensor = {
  id: 'A1',
  quantity: 'acceleration',
  logger: 'L1',
  mount: 'deck',
  alongM: 5,
  unit: 'g',
  range: [-2, 2],
  rateHz: RATE,
  noiseLimit: 0.05,
};

/** Runs `seconds` of samples, in blocks of half a second where no size is given, and lists the conditions as `code state`. */
function watch(seconds: number, sampleAt: (second: number) => number, sensor = SENSOR, size = 50) {
  const vitals = createVitals(sensor);
  const seen: string[] = [];
  const start = 1_700_000_040_000_000;
  for (let at = 0; at < seconds * RATE; at += size) {
    const block = Float32Array.from({ length: size }, (_, i) => sampleAt((at + i) / RATE));
    const microsAt = (index: number): number => start + ((at + index) * 1e6) / RATE;
    watchVitals(vitals, 'b', block, 0, size, microsAt, ({ code, state }) => seen.push(`${code} ${state}`));
  }
  return { vitals, seen };
}

const random = createRandom(5);
const quiet = (): number => 0.01 * random.normal();

describe('the vitals of one sensor', () => {
  it('say nothing of a good one, and know its noise and offset after a minute', () => {
    const { vitals, seen } = watch(130, () => 0.3 + quiet());
    expect(seen).toEqual([]);
    // Standard deviation of normal noise, lower quartile of one-second estimates: within 15 % of 0.01.
    expect(vitals.noise).toBeGreaterThan(0.0085);
    expect(vitals.noise).toBeLessThan(0.0105);
    expect(vitals.offset).toBeCloseTo(0.3, 2);
    expect(vitals.samples).toBe(13_000);
  });

  it('do not take trains for noise', () => {
    const { vitals } = watch(130, (s) => quiet() + (s % 30 < 10 ? Math.sin(2 * Math.PI * 5 * s) : 0));
    expect(vitals.noise).toBeLessThan(0.0105);
  });

  it('see a value that is stuck, and that it moves again', () => {
    const { seen } = watch(20, (s) => (s > 5 && s < 12 ? 0.1 : quiet()));
    expect(seen).toEqual(['flat began', 'flat ended']);
  });

  it('see clipping at the ends of the range, 2 g being 19.6133 m/s²', () => {
    const { seen } = watch(10, (s) => Math.max(-19.6133, Math.min(19.6133, 25 * Math.sin(2 * Math.PI * 3 * s))));
    expect(seen[0]).toBe('clipped began');
    expect(watch(10, (s) => 19 * Math.sin(2 * Math.PI * 3 * s)).seen).toEqual([]);
  });

  it('see single samples that stand out, and forget them after a minute', () => {
    const { seen } = watch(200, (s) => quiet() + (Math.abs(s - 20) < 0.001 ? 3 : 0));
    expect(seen).toEqual(['spike began', 'spike ended']);
  });

  it.each([1, 5, 200, 1000])('see the same where blocks are of %i samples', (size) => {
    // A lone sample in a quiet second; a train drums in the next, which has no part in it.
    const sampleAt = (s: number): number => {
      const i = Math.round(s * RATE);
      if (i === 20 * RATE + 50) return 3;
      return i >= 21 * RATE && i < 22 * RATE ? 0.5 * (-1) ** i : 0.01 * Math.sin(i * i);
    };
    expect(watch(130, sampleAt, SENSOR, size).seen).toEqual(['spike began', 'spike ended']);
  });

  it('see a noise floor above its limit, and its return', () => {
    const { seen } = watch(260, (s) => (s < 130 ? 10 : 1) * quiet());
    expect(seen.filter((one) => one.startsWith('noise'))).toEqual(['noise high began', 'noise high ended']);
  });

  it('see an offset that moves by more than 2 % of the range, and its return', () => {
    const { seen } = watch(320, (s) => quiet() + (s > 100 && s < 200 ? 1 : 0));
    expect(seen.filter((one) => one.startsWith('offset'))).toEqual(['offset drift began', 'offset drift ended']);
  });

  it('do not call a slow probe flat', () => {
    const slow: Sensor = { ...SENSOR, quantity: 'temperature', mount: 'air', unit: 'Cel', rateHz: 1 };
    const { vitals, seen } = watch(130, () => 8, { ...slow });
    expect(seen).toEqual([]);
    expect(vitals.offset).toBe(8);
  });
});
