import { describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import { isLowerBound } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import { recompute } from '#core/passage/pipeline.ts';
import { bridgeParameters } from '../../../simulator/parameters.ts';
import { simulate } from '../../../simulator/scene.ts';
import { createTrain } from '../../../simulator/train.ts';
import { plainBridge } from '../../support/bridges.ts';
import { blocksOf, runPipeline } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const at = (second: number): number => FROM + second * 1e6;
const DEFINITION = plainBridge();

// A train of 32 axles that is on the bridge from 20 s to 26.3 s.
const BLOCKS = [
  ...blocksOf(
    'plain',
    simulate({
      definition: DEFINITION,
      parameters: bridgeParameters(DEFINITION),
      seed: 3,
      fromMicros: FROM,
      toMicros: at(60),
      events: [
        {
          kind: 'passage',
          train: createTrain('intercity', 7),
          onMicros: at(20),
          speedMs: 38,
          direction: 'rising',
        },
      ],
    }).channels,
    0.1,
  ),
];

function passagesOf(kept: (second: number) => boolean): Passage[] {
  const blocks = BLOCKS.filter(({ startMicros }: SampleBlock) => kept((startMicros - FROM) / 1e6));
  const { passages } = runPipeline(DEFINITION, blocks);
  for (const { passage, channels } of passages) {
    expect(recompute(DEFINITION, 1, passage, channels)).toEqual(passage);
  }
  return passages.map(({ passage }) => passage);
}

const WHOLE = passagesOf(() => true)[0]!;

function expectBound(passage: Passage, words: RegExp): void {
  expect(isLowerBound(passage.peak.measured)).toBe(true);
  expect(isLowerBound(passage.rawPeak)).toBe(true);
  expect(passage.quality).toBe('poor');
  expect(passage.notes.join('\n')).toMatch(words);
  expect(passage.peak.measured.value).toBeLessThanOrEqual(WHOLE.peak.measured.value! + 0.05);
}

describe('an outage while a train is on the bridge', () => {
  it.each([20.6, 22, 24, 26])('that begins at %d s makes the peak a lower bound', (second) => {
    const [passage] = passagesOf((t) => t < second || t >= second + 20);
    expectBound(passage!, /the recording stops -?\d\.\d\d s after the last axle that was seen/);
    expect(passage!.axleCount.value).toBeLessThanOrEqual(32);
    expect(passage!.axleCount).toMatchObject({ quality: 'poor' });
  });

  it.each([20.3, 22, 25])('that ends at %d s makes the peak a lower bound', (second) => {
    const [passage] = passagesOf((t) => t < 12 || t >= second);
    expectBound(passage!, /the recording begins \d\.\d\d s before the first axle that was seen/);
  });

  it('that ends at 22 s with the very first sample is not told from quiet: there is no passage', () => {
    expect(passagesOf((t) => t >= 22)).toEqual([]);
  });

  it('of a quarter of a second of every channel is told, and makes the peak a lower bound', () => {
    const [passage, ...more] = passagesOf((t) => t < 23 || t >= 23.3);
    expect(more).toEqual([]);
    expectBound(passage!, /A1: gap/);
  });
});

describe('an outage beside a train', () => {
  it.each([
    ['long before', (t: number) => t < 5 || t > 12],
    ['right after it has left', (t: number) => t < 28.5],
    ['a good second before it comes', (t: number) => t > 18],
  ])('%s takes nothing from its peak', (_, kept) => {
    const [passage] = passagesOf(kept);
    expect(passage!.peak.measured).toMatchObject({ quality: 'good' });
    // the offset is of another quiet part
    expect(passage!.peak.measured.value).toBeCloseTo(WHOLE.peak.measured.value!, 3);
    expect(passage!.axleCount).toEqual(WHOLE.axleCount);
  });
});
