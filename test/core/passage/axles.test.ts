import { describe, expect, it } from 'vitest';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { axlePulses, matchPulses, readAxles, type AxleReading } from '#core/passage/axles.ts';
import { arrangeRecord } from '#core/passage/record.ts';
import { gauge, plainBridge } from '../../support/bridges.ts';
import { createRandom } from '../../support/random.ts';

const RATE = 500;
const START = 1_700_000_000_000_000;
const BOGIES = [0, 2.5, 19, 21.5, 26.4, 28.9, 45.4, 47.9];

/** Time, s, at which an axle that entered at `t0` stands at `alongM`. */
type Course = (alongM: number) => number;

const steady =
  (t0: number, speed: number): Course =>
  (alongM) =>
    t0 + alongM / speed;

/** A gauge's samples: a bell of 0.35 m for each axle at a local speed, plus noise. */
function samplesOf(times: readonly number[], speed: number, noise: number, seed: number, seconds = 20): Float32Array {
  const random = createRandom(seed);
  const sigma = 0.35 / speed;
  return Float32Array.from({ length: seconds * RATE }, (_, i) => {
    const t = i / RATE;
    let sum = noise * random.normal();
    for (const time of times) sum += 80 * Math.exp(-0.5 * ((t - time) / sigma) ** 2);
    return sum;
  });
}

function read(channels: Record<string, Float32Array>, bridge = plainBridge()): AxleReading {
  const windows: WindowChannel[] = Object.entries(channels).map(([sensor, samples]) => ({
    sensor,
    rateHz: RATE,
    runs: [{ startMicros: START, samples }],
  }));
  return readAxles(bridge, arrangeRecord(bridge, windows, START + 5_000_000, START + 20_000_000));
}

const crossing = (alongM: number, speed = 40): number[] =>
  BOGIES.map((behind) => steady(6 + behind / speed, speed)(alongM));

describe('axles from two rail gauges', () => {
  it('gives count, speed, direction, phases and pattern of a train in noise', () => {
    const reading = read({ S1: samplesOf(crossing(0), 40, 2, 1), S2: samplesOf(crossing(20), 40, 2, 2) });
    expect(reading.count.value).toBe(8);
    expect(Math.abs(reading.speedMs.value! / 40 - 1)).toBeLessThan(0.005);
    expect(reading.direction).toBe('rising');
    expect(reading.onMicros).toBeCloseTo(START + 6e6, -4);
    expect(reading.offMicros).toBeCloseTo(START + 6e6 + ((47.9 + 20) / 40) * 1e6, -4);
    reading.axles.forEach((axle, i) => expect(Math.abs(axle.behindFirstM - BOGIES[i]!)).toBeLessThan(0.25));
    expect(reading.axles.every((axle) => Math.abs(axle.weight - 1) < 0.15)).toBe(true);
  });

  it('states a speed error that covers the true speed in 95 of 100 trains', () => {
    let inside = 0;
    for (let seed = 0; seed < 100; seed++) {
      const random = createRandom(100 + seed);
      const speed = random.uniform(15, 60);
      // The tape is off by the 20 mm that the error budget allows each sensor (one standard deviation).
      const s1 = samplesOf(crossing(0.02 * random.normal(), speed), speed, 2, seed);
      const s2 = samplesOf(crossing(20 + 0.02 * random.normal(), speed), speed, 2, seed + 1000);
      const { speedMs } = read({ S1: s1, S2: s2 });
      expect(speedMs.value).not.toBeNull();
      if (speedMs.value !== null && Math.abs(speedMs.value - speed) < 1.96 * speedMs.standardError!) inside += 1;
    }
    // Binomial: 95 ± 2.2; below 86 has a chance under 1 in 5 000.
    expect(inside).toBeGreaterThanOrEqual(86);
  });

  it('counts a loaded engine and light wagons together: pulses of a quarter of the height', () => {
    const heavy = samplesOf(crossing(0).slice(0, 4), 40, 1, 1);
    const light = samplesOf(crossing(0).slice(4), 40, 0, 1).map((v) => v / 4);
    const s1 = heavy.map((v, i) => v + light[i]!);
    const heavy2 = samplesOf(crossing(20).slice(0, 4), 40, 1, 2);
    const light2 = samplesOf(crossing(20).slice(4), 40, 0, 2).map((v) => v / 4);
    const s2 = heavy2.map((v, i) => v + light2[i]!);
    expect(read({ S1: s1, S2: s2 }).count.value).toBe(8);
  });

  it('lowers the quality, not the count, when one gauge missed an axle', () => {
    const times = crossing(20).filter((_, i) => i !== 3);
    const reading = read({ S1: samplesOf(crossing(0), 40, 1, 1), S2: samplesOf(times, 40, 1, 2) });
    expect(reading.count).toMatchObject({ value: 8, quality: 'usable' });
    expect(Math.abs(reading.speedMs.value! / 40 - 1)).toBeLessThan(0.01);
    expect(reading.notes.join()).toContain('S1 saw 8 axles, S2 7');
  });

  it('says that the speed varied when the train brakes hard', () => {
    const slow = (alongM: number): number[] =>
      BOGIES.map((behind) => {
        const way = behind + alongM;
        return 6 + (20 - Math.sqrt(400 - 2 * 2.5 * way)) / 2.5;
      });
    const reading = read({ S1: samplesOf(slow(0), 15, 1, 1), S2: samplesOf(slow(20), 12, 1, 2) });
    expect(reading.count.value).toBe(8);
    expect(reading.notes.join()).toMatch(/speed varied from \d+\.\d to \d+\.\d m\/s/);
    expect(reading.speedMs).toMatchObject({ quality: 'usable' });
  });

  it('says what one gauge can say when the other is dead', () => {
    const reading = read({ S1: samplesOf(crossing(0), 40, 1, 1), S2: new Float32Array(20 * RATE) });
    expect(reading.count).toMatchObject({ value: 8, quality: 'usable', reason: 'counted on S1 alone' });
    expect(reading.speedMs.value).toBeNull();
    expect(reading.onMicros).toBeNull();
    expect(reading.firstPulse).toBeCloseTo(START + 6e6, -4);
  });

  it('does not make a train of two gauges that disagree', () => {
    const random = createRandom(9);
    const odd = Array.from({ length: 3 }, () => random.uniform(6, 15));
    const reading = read({ S1: samplesOf(crossing(0), 40, 1, 1), S2: samplesOf(odd, 40, 1, 2) });
    expect(reading.speedMs.value).toBeNull();
    expect(reading.notes).toContain('the axle sensors do not agree');
  });

  it('tells apart a bridge without axle sensors, a recording without them, dead ones, and those that saw nothing', () => {
    const noise = samplesOf([], 40, 1, 1);
    expect(read({ S1: noise, S2: samplesOf([], 40, 1, 2) }).count).toMatchObject({
      reason: 'the axle sensors saw nothing',
    });
    const bare = plainBridge({ sensors: plainBridge().sensors.filter(({ quantity }) => quantity === 'acceleration') });
    expect(read({ A1: noise }, bare).count).toMatchObject({ reason: 'the bridge has no axle sensor' });
    expect(read({ A1: noise }).count).toMatchObject({ reason: 'no samples of the axle sensors' });
    expect(read({ S1: new Float32Array(noise.length) }).count).toMatchObject({
      reason: 'the axle sensors give no signal',
    });
  });

  it('takes gauges less than a metre apart for one place', () => {
    const bridge = plainBridge({ sensors: [gauge('S1', 0), gauge('S2', 0.5)] });
    const reading = read({ S1: samplesOf(crossing(0), 40, 1, 1), S2: samplesOf(crossing(0.5), 40, 1, 2) }, bridge);
    expect(reading.speedMs.value).toBeNull();
    expect(reading.count.value).toBe(8);
  });
});

describe('pulses of one gauge', () => {
  it('are placed between samples to a tenth of a sample in the clean', () => {
    const bridge = plainBridge();
    const time = 7.12345;
    const samples = samplesOf([time], 40, 0, 1);
    const [channel] = arrangeRecord(
      bridge,
      [{ sensor: 'S1', rateHz: RATE, runs: [{ startMicros: START, samples }] }],
      START + 5e6,
      START + 2e7,
    );
    const [pulse] = axlePulses(channel!);
    expect(Math.abs(pulse!.micros - START - time * 1e6)).toBeLessThan(200);
    expect(pulse!.height).toBeCloseTo(80, 0);
  });
});

describe('matching of two lists of pulses', () => {
  const pulses = (...seconds: number[]) => seconds.map((s) => ({ micros: s * 1e6, height: 1 }));

  it('pairs one to one when the numbers are equal', () => {
    expect(matchPulses(pulses(1, 2, 3), pulses(1.5, 2.5, 3.5))).toMatchObject({ complete: true });
  });

  it('takes the shared delay when they are not, and gives up on fewer than two agreements', () => {
    const { pairs, complete } = matchPulses(pulses(1, 2, 3.3, 4), pulses(1.5, 2.5, 4.5));
    expect(complete).toBe(false);
    expect(pairs.map(([a]) => a.micros / 1e6)).toEqual([1, 2, 4]);
    expect(matchPulses(pulses(1, 2, 3, 4, 5), pulses(7, 9.4)).pairs).toEqual([]);
  });
});
