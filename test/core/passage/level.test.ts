import { describe, expect, it } from 'vitest';
import type { LevelEvent } from '#core/contract/pipeline.ts';
import { createLevelWatch, watchLevel } from '#core/passage/level.ts';
import { createPipeline, step } from '#core/passage/pipeline.ts';
import { deckSensor, plainBridge } from '../../support/bridges.ts';
import { createRandom } from '../../support/random.ts';

const FROM = 1_780_000_000_000_000;
const LIMIT = plainBridge().limits[0]!;

type Told = Pick<LevelEvent, 'kind' | 'severity' | 'micros' | 'value'>;

function watched(x: Float64Array, rateHz: number, levels = LIMIT.levels, size = x.length): Told[] {
  const watch = createLevelWatch({ ...LIMIT, levels });
  const told: Told[] = [];
  for (let at = 0; at < x.length; at += size) {
    const to = Math.min(x.length, at + size);
    const micros = (index: number): number => FROM + Math.round((index * 1e6) / rateHz);
    watchLevel(watch, x, at, to, micros, (event) => told.push(event));
  }
  return told;
}

const sine = (cyclesASample: number, phase: number, height: number, length = 200): Float64Array =>
  Float64Array.from({ length }, (_, i) => height * Math.sin(2 * Math.PI * cyclesASample * i + phase));

describe('the live level', () => {
  it.each([
    [0.01, 0.003],
    [0.09, 0.003],
    [0.15, 0.017],
    [0.225, 0.08],
  ])('of a sine at %d of the rate is at most its height, and low by a share of %d at most', (cycles, low) => {
    for (let phase = 0; phase < 6.3; phase += 0.05) {
      const one = sine(cycles, phase, 3, Math.ceil(1.5 / cycles));
      const highest = Math.max(...watched(one, 500, { AL: 0.5 }).map(({ value }) => value));
      expect(highest).toBeLessThanOrEqual(3 * (1 + 1e-12));
      // a height is told again only when it is 1 % more
      expect(highest).toBeGreaterThan(3 * (1 - low) * 0.99);
    }
  });

  it('is passed by a crest between two samples that are both below it', () => {
    const x = sine(0.15, Math.PI / 2 - Math.PI * 0.15, 3.6, 3);
    expect(Math.max(...x)).toBeLessThan(3.3);
    expect(watched(x, 200)).toContainEqual(expect.objectContaining({ kind: 'passed', severity: 'IAL' }));
  });

  it('says the same however the samples are split', () => {
    const random = createRandom(3);
    const x = Float64Array.from(
      { length: 9000 },
      (_, i) => 2.6 * Math.sin(i / 9) * (i < 3000 ? 1 : 0) + 0.4 * random.normal(),
    );
    const whole = watched(x, 500);
    expect(whole.map(({ kind }) => kind)).toContain('returned');
    for (const size of [1, 2, 3, 7, 250]) expect(watched(x, 500, LIMIT.levels, size)).toEqual(whole);
  });
});

describe('the live level after a gap', () => {
  const bridge = plainBridge({ sensors: [deckSensor('A1', 10)] });
  // 1.5 m/s² at 5 Hz below all limits, and 2.5 m/s² of noise above the band, of which 45 Hz lets nearly nothing through.
  const x = Float64Array.from({ length: 10_000 }, (_, i) => {
    const t = i / 500;
    return 1.5 * Math.sin(10 * Math.PI * t) + 2.5 * Math.sin(2 * Math.PI * 187.3 * t);
  });
  const quieter = x.map((_, i) => 1.5 * Math.sin(i / 16));
  const levelsOf = (spoil: (samples: Float64Array, block: number) => Float64Array | null): LevelEvent[] => {
    const state = createPipeline(bridge, 1);
    const events: LevelEvent[] = [];
    for (let block = 0; block < 200; block++) {
      const samples = spoil(x.slice(50 * block, 50 * block + 50), block);
      if (samples === null) continue;
      const startMicros = FROM + block * 100_000;
      const channels = [{ sensor: 'A1', samples }];
      events.push(
        ...step(state, { bridge: 'plain', logger: 'L1', sequence: null, startMicros, rateHz: 500, channels }).levels,
      );
    }
    return events;
  };

  it('is not above where the signal never was: blocks lost', () => {
    expect(levelsOf((samples) => samples)).toEqual([]);
    expect(levelsOf((samples, block) => (block % 30 > 12 ? null : samples))).toEqual([]);
  });

  it('is not above where the signal never was: samples that are not numbers, one or many', () => {
    for (const width of [1, 2, 3, 9, 40]) {
      const spoilt = (samples: Float64Array, block: number): Float64Array =>
        block % 3 === 0 ? samples.map((value, i) => (i >= 7 && i < 7 + width ? NaN : value)) : samples;
      expect(levelsOf(spoilt)).toEqual([]);
    }
  });

  it('is seen between single samples that are missing all the time', () => {
    const louder = (samples: Float64Array, block: number): Float64Array =>
      samples.map((_, i) => (i % 10 === 0 ? NaN : quieter[50 * block + i]! * (block > 100 && block < 120 ? 2 : 1)));
    expect(levelsOf(louder)[0]).toMatchObject({ kind: 'passed', severity: 'AL' });
  });
});
