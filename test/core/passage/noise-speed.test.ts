import { describe, expect, it } from 'vitest';
import type { RollingNoise } from '#core/passage/rolling-noise.ts';
import { FRAME_MICROS } from '#core/passage/rolling-noise.ts';
import { noiseSpeed } from '#core/passage/noise-speed.ts';
import { createRandom } from '../../support/random.ts';

const START = 1_780_000_000_000_000;
const ON_S = 2;
const LENGTH_M = 40;
/** A locomotive and five coaches: middle of each bogie behind the first axle, m. No two vehicles alike. */
const MIXED = [1.5, 10.5, 18, 36, 42, 60, 67, 83, 90, 108, 115.5, 131];

/**
 * Noise power of sensors as bogies pass at a speed: 1 beside a bogie, falling by e over 3 m, and a hundredth from
 * anywhere on the bridge; each frame scattered like the mean square of `perFrame` normal samples.
 */
function noiseOf(speedMs: number, placesM: readonly number[], bogiesM: readonly number[], seed: number): RollingNoise {
  const random = createRandom(seed);
  const seconds = ON_S + ((bogiesM.at(-1) ?? 0) + LENGTH_M) / Math.abs(speedMs) + 2;
  const frames = Math.ceil((seconds * 1e6) / FRAME_MICROS);
  const perFrame = 5;
  const scatter = (): number => {
    let sum = 0;
    for (let k = 0; k < perFrame; k++) sum += random.normal() ** 2;
    return sum / perFrame;
  };
  const channels = placesM.map((alongM) => {
    const power = Float64Array.from({ length: frames }, (_, f) => {
      const t = (f * FRAME_MICROS) / 1e6 - ON_S;
      let mean = 1e-3;
      for (const behindM of bogiesM) {
        const wayM = Math.abs(speedMs) * t - behindM;
        if (wayM < 0 || wayM > LENGTH_M) continue;
        const x = speedMs > 0 ? wayM : LENGTH_M - wayM;
        mean += Math.exp(-Math.abs(x - alongM) / 3) + 0.01;
      }
      return mean * scatter();
    });
    return { alongM, power, floor: 1e-3 };
  });
  return { startMicros: START, total: new Float64Array(frames), clear: true, channels };
}

function speedOf(speedMs: number, placesM: readonly number[], bogiesM = MIXED, seed = 1) {
  const onMicros = START + ON_S * 1e6;
  const offMicros = onMicros + (((bogiesM.at(-1) ?? 0) + LENGTH_M) / Math.abs(speedMs)) * 1e6;
  return noiseSpeed(noiseOf(speedMs, placesM, bogiesM, seed), onMicros, offMicros);
}

describe('speed from wheel-rail noise at accelerometers', () => {
  it.each([8, 20, -33, 50])('is that of the bogies that pass, and its sign their direction: %s m/s', (speedMs) => {
    const { speedMs: measured, direction } = speedOf(speedMs, [5, 14, 26, 35]);
    expect(direction).toBe(speedMs > 0 ? 'rising' : 'falling');
    if (measured.value === null || measured.standardError === null) throw new Error('no speed');
    expect(Math.abs(measured.value / Math.abs(speedMs) - 1)).toBeLessThan(0.05);
    expect(measured.quality).toBe('usable');
  });

  it('lies within two of its standard errors of the truth in nine of ten trains or more, and is told for most', () => {
    let told = 0;
    let within = 0;
    const trains = 60;
    for (let seed = 0; seed < trains; seed++) {
      const speedMs = 15 + (30 * seed) / trains;
      const { speedMs: measured } = speedOf(speedMs, [6, 20, 20, 34], MIXED, seed);
      if (measured.value === null || measured.standardError === null) continue;
      told += 1;
      if (Math.abs(measured.value - speedMs) < 2 * measured.standardError) within += 1;
    }
    expect(told).toBeGreaterThan(0.7 * trains);
    expect(within / told).toBeGreaterThanOrEqual(0.9);
  });

  it('is not told where a train of equal wagons fits two speeds', () => {
    // Sensors 14 m apart and a bogie every 14 m: each is heard at all sensors at once, at any speed nearly.
    const even = Array.from({ length: 40 }, (_, i) => 14 * i);
    expect(speedOf(20, [6, 20, 34], even).speedMs.value).toBeNull();
  });

  it.each([
    ['sensors side by side', [20, 21], 'too close together'],
    ['one sensor', [20], 'too close together'],
    ['two sensors, which give one delay that nothing confirms', [5, 35], 'fewer than three'],
  ])('is not told by %s', (_, places, reason) => {
    const { speedMs, direction } = speedOf(20, places);
    expect(direction).toBeNull();
    if (speedMs.value !== null) throw new Error('a speed');
    expect(speedMs.reason).toContain(reason);
  });

  it('is not made up of noise without a train, nor of a moment', () => {
    const silent = noiseOf(20, [5, 20, 35], [], 1);
    expect(noiseSpeed(silent, START + 1e6, START + 3e6).speedMs.value).toBeNull();
    const short = noiseOf(20, [5, 20, 35], [0], 1);
    expect(noiseSpeed(short, START, START + 300_000).speedMs).toMatchObject({
      value: null,
      reason: 'the passage is too short for a speed from noise',
    });
    const silence = { ...silent, channels: silent.channels.map((one) => ({ ...one, power: one.power.map(() => 0) })) };
    expect(noiseSpeed(silence, START + 1e6, START + 3e6).speedMs.value).toBeNull();
  });
});
