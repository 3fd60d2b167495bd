import { describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { recompute } from '#core/passage/pipeline.ts';
import { deckSensor, plainBridge } from '../../support/bridges.ts';
import { createRandom } from '../../support/random.ts';
import { runPipeline } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const RATE = 500;
const DEFINITION = plainBridge({ sensors: [deckSensor('A1', 5), deckSensor('A2', 10), deckSensor('A3', 15)] });

/** Quiet, and 4 m/s² of a pure 5 Hz sine on the second sensor, half of it on the others, in the stretches given. */
function blocks(seconds: number, size: number, ...shaken: readonly [from: number, to: number][]): SampleBlock[] {
  const random = createRandom(8);
  const channels = ['A1', 'A2', 'A3'].map((sensor, k) => ({
    sensor,
    samples: Float64Array.from({ length: seconds * RATE }, (_, i) => {
      const t = i / RATE;
      // rises and falls within half a second, so that no kink reaches the band of wheel-rail noise
      const height = Math.max(0, ...shaken.map(([from, to]) => Math.min(1, 2 * (t - from), 2 * (to - t))));
      const smooth = height * height * (3 - 2 * height);
      return smooth * (k === 1 ? 4 : 2) * Math.sin(10 * Math.PI * t) + 0.002 * random.normal();
    }),
  }));
  return Array.from({ length: Math.ceil((seconds * RATE) / size) }, (_, n) => ({
    bridge: 'plain',
    logger: 'L1',
    sequence: null,
    startMicros: FROM + (n * size * 1e6) / RATE,
    rateHz: RATE,
    channels: channels.map(({ sensor, samples }) => ({ sensor, samples: samples.slice(n * size, (n + 1) * size) })),
  }));
}

const run = (seconds: number, ...shaken: readonly [number, number][]): PipelineOutput =>
  runPipeline(DEFINITION, blocks(seconds, 50, ...shaken));

describe('a level that is passed without a train', () => {
  it('is recorded once it is over, with its wave form, and says that no train was recognised', () => {
    const { passages, progress } = run(60, [20, 26]);
    expect(progress).toEqual([]);
    expect(passages).toHaveLength(1);
    const { passage, channels } = passages[0]!;
    expect(passage.phases).toMatchObject({ foundBy: 'live level', quality: 'usable' });
    expect(passage.notes.join()).toContain('no train was recognised');
    expect((passage.phases.onMicros - FROM) / 1e6).toBeCloseTo(20.3, 0);
    expect((passage.phases.offMicros - FROM) / 1e6).toBeCloseTo(25.8, 0);
    expect(passage.peak).toMatchObject({ sensor: 'A2', limit: 'deck', severity: 'IAL' });
    expect(passage.peak.measured.value).toBeCloseTo(4, 2);
    expect(passage).toMatchObject({ direction: null, axles: [], axleCount: { value: null }, speedMs: { value: null } });
    expect(channels.map(({ runs }) => runs[0]!.samples.length / RATE)).toEqual([
      expect.closeTo(16.6, 0),
      expect.closeTo(16.6, 0),
      expect.closeTo(16.6, 0),
    ]);
    expect(recompute(DEFINITION, 1, passage, channels)).toEqual(passage);
  });

  it('is recorded to the same bits however the samples are split', () => {
    const whole = runPipeline(DEFINITION, blocks(60, 30_000, [20, 26])).passages;
    for (const size of [1, 7, 50, 333]) {
      expect(runPipeline(DEFINITION, blocks(60, size, [20, 26])).passages).toEqual(whole);
    }
  });

  it('is one record where it comes and goes within ten seconds, and two where it stays away longer', () => {
    expect(run(80, [20, 23], [31, 34]).passages).toHaveLength(1);
    expect(run(80, [20, 23], [38, 41]).passages).toHaveLength(2);
  });

  it('is recorded for two minutes where it does not end, once', () => {
    const { passages } = run(400, [20, 320]);
    expect(passages.map(({ passage }) => Math.round((passage.endMicros - passage.startMicros) / 1e6))).toEqual([125]);
  });

  it('is recorded where the recording ends in it', () => {
    expect(run(24, [20, 26]).passages).toHaveLength(1);
  });

  it('is no record where the level was not passed', () => {
    expect(
      runPipeline(
        { ...DEFINITION, limits: [{ ...DEFINITION.limits[0]!, levels: { AL: 4.1 } }] },
        blocks(60, 50, [20, 26]),
      ).passages,
    ).toEqual([]);
  });
});
