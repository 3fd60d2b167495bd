import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { centroid, delayBetween } from '../../../server/core/signal/delay.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { withNoise } from './signals.ts';

/** A bell of standard width 3 samples × √2; band-limited to 1e-15 at half the rate. */
const bell = (at: number, length = 200): Float64Array =>
  Float64Array.from({ length }, (_, i) => Math.exp(-(((i - at) / 6) ** 2)));

describe('delay between two records', () => {
  it('is exact to 1e-9 samples for a band-limited pulse without noise, either way', () => {
    forSeeds(seedsFrom(1, 30), (random) => {
      const at = random.uniform(60, 140);
      const lag = random.uniform(-20, 20);
      const found = delayBetween(bell(at), bell(at + lag), 100);
      expect(Math.abs((found?.seconds ?? NaN) - lag / 100)).toBeLessThan(1e-11);
      expect(found?.correlation).toBeCloseTo(1, 10);
      expect(found?.standardError).toBeLessThan(1e-5);
    });
  });

  it('has the scatter that its standard error says, in noise', () => {
    const random = createRandom(42);
    let squares = 0;
    let claimed = 0;
    const runs = 400;
    for (let i = 0; i < runs; i++) {
      const x = withNoise(bell(80), random, 0.05);
      const y = withNoise(bell(93.7), random, 0.05);
      const found = delayBetween(x, y, 100, { bandHz: [0, 8] });
      squares += ((found?.seconds ?? NaN) - 0.137) ** 2;
      claimed += (found?.standardError ?? NaN) ** 2;
    }
    const ratio = Math.sqrt(squares / claimed);
    // 400 runs: standard error of the ratio 3.5 %
    expect(ratio).toBeGreaterThan(0.85);
    expect(ratio).toBeLessThan(1.15);
  });

  it('turns its sign when the records change places, and does not depend on their scales', () => {
    const x = bell(80);
    const y = bell(91.3);
    const there = delayBetween(x, y, 100);
    const back = delayBetween(
      y.map((v) => 50 * v),
      x,
      100,
    );
    expect(back?.seconds).toBeCloseTo(-(there?.seconds ?? NaN), 12);
  });

  it('looks only at the delays it is asked for', () => {
    const x = bell(60).map((v, i) => v + (bell(120)[i] ?? NaN));
    const y = bell(70);
    expect(delayBetween(x, y, 100, { betweenS: [0, 1] })?.seconds).toBeCloseTo(0.1, 3);
    expect(delayBetween(x, y, 100, { betweenS: [-1, 0] })?.seconds).toBeCloseTo(-0.5, 3);
  });

  it('says nothing where no delay in the range is a maximum', () => {
    expect(delayBetween(bell(60), bell(100), 100, { betweenS: [0, 0.1] })).toBeNull();
    expect(delayBetween(new Float64Array(50), bell(20, 50), 100)).toBeNull();
    expect(delayBetween(bell(20, 50), new Float64Array(50), 100)).toBeNull();
    expect(
      delayBetween(
        bell(20, 50),
        bell(20, 50).map((v) => -v),
        100,
      ),
    ).toBeNull();
    expect(delayBetween(bell(1, 3), bell(1, 3), 100)).toBeNull();
    expect(delayBetween(bell(60), bell(100), 100, { betweenS: [0.2, 0.1] })).toBeNull();
  });

  it('refuses records of different lengths', () => {
    expect(() => delayBetween(bell(1, 9), bell(1, 10), 100)).toThrow(RangeError);
  });
});

describe('centroid of a pulse', () => {
  it('finds the middle of a bell anywhere between samples', () => {
    forSeeds(seedsFrom(1, 20), (random) => {
      const at = random.uniform(50, 150);
      expect(Math.abs(centroid(bell(at)) - at)).toBeLessThan(1e-9);
    });
  });

  it('weighs only what is above zero inside the range', () => {
    expect(centroid(Float64Array.of(0, 1, 3, 1, 0))).toBe(2);
    expect(centroid(Float64Array.of(-9, 1, 3, 1, -9))).toBe(2);
    expect(centroid(Float64Array.of(50, 1, 3, 1, 50), 1, 4)).toBe(2);
    expect(centroid(Float64Array.of(0, -1, 0))).toBeNaN();
  });
});

describe.skipIf(!available('python3-scipy'))('delay against SciPy', () => {
  it('agrees with the maximum of correlate on a record interpolated a hundred times', () => {
    const random = createRandom(6);
    const smooth = noise(random, 400).map((v, i) => v * Math.exp(-(((i - 200) / 50) ** 2)));
    const script = `
x = signal.sosfiltfilt(signal.butter(6, 0.2, output='sos'), np.array(input))
k = np.fft.rfftfreq(len(x))
y = np.fft.irfft(np.fft.rfft(x) * np.exp(-2j * np.pi * k * 7.37), len(x))
fine = signal.correlate(signal.resample(y, len(y) * 100), signal.resample(x, len(x) * 100))
output = {'x': x, 'y': y, 'lag': (int(np.argmax(fine)) - (len(x) * 100 - 1)) / 100}
`;
    const Answer = Type.Object({ x: Type.Array(Type.Number()), y: Type.Array(Type.Number()), lag: Type.Number() });
    const { x, y, lag } = scipy(script, smooth, Answer);
    const found = delayBetween(Float64Array.from(x), Float64Array.from(y), 1);
    expect(Math.abs((found?.seconds ?? NaN) - lag)).toBeLessThan(0.01);
    expect(Math.abs((found?.seconds ?? NaN) - 7.37)).toBeLessThan(1e-4);
  });
});
