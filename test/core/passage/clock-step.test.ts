import { describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import { bridgeParameters } from '../../../simulator/parameters.ts';
import { simulate } from '../../../simulator/scene.ts';
import { createTrain } from '../../../simulator/train.ts';
import { deckSensor, gauge, plainBridge } from '../../support/bridges.ts';
import { blocksOf, runPipeline } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const DEFINITION = plainBridge({
  loggers: [{ id: 'L1' }, { id: 'L2' }],
  sensors: [
    deckSensor('A1', 5),
    deckSensor('A2', 10),
    gauge('S1', 0),
    gauge('S2', 20),
    deckSensor('B1', 15, { logger: 'L2' }),
  ],
});

/** Three trains in four minutes; what `restamp` does to a block from the second minute on is up to the test. */
function blocks(restamp: (block: SampleBlock) => SampleBlock): SampleBlock[] {
  const { channels } = simulate({
    definition: DEFINITION,
    parameters: bridgeParameters(DEFINITION),
    seed: 5,
    fromMicros: FROM,
    toMicros: FROM + 240e6,
    events: [40, 130, 200].map((second) => ({
      kind: 'passage',
      train: createTrain('intercity', 7),
      onMicros: FROM + second * 1e6,
      speedMs: 38,
      direction: 'rising',
    })),
  });
  return [...blocksOf('plain', channels)].flatMap((block) => {
    const second = block.channels.filter(({ sensor }) => sensor === 'B1');
    const first = block.channels.filter(({ sensor }) => sensor !== 'B1');
    return [
      { ...block, channels: first },
      { ...block, logger: 'L2', channels: second },
    ].map((one) => (one.startMicros < FROM + 90e6 ? one : restamp(one)));
  });
}

const seconds = (micros: number): number => Math.round((micros - FROM) / 1e6);

describe('a bridge whose loggers step back in time', () => {
  it('finds the trains after the step, at the time the loggers give', () => {
    const output = runPipeline(
      DEFINITION,
      blocks((block) => ({ ...block, startMicros: block.startMicros - 60e6 })),
    );
    expect(output.passages.map(({ passage }) => seconds(passage.phases.onMicros))).toEqual([40, 70, 140]);
    expect(output.passages.map(({ passage }) => passage.axleCount.value)).toEqual([32, 32, 32]);
    const steps = output.health.filter(({ code }) => code === 'clock step');
    expect(
      steps
        .filter(({ state }) => state === 'began')
        .map(({ sensor }) => sensor)
        .toSorted(),
    ).toEqual(['A1', 'A2', 'B1', 'S1', 'S2']);
    expect(steps.filter(({ state }) => state === 'ended')).toHaveLength(5);
  });

  it('goes on with the loggers that did not step', () => {
    const output = runPipeline(
      DEFINITION,
      blocks((block) => (block.logger === 'L2' ? { ...block, startMicros: block.startMicros - 60e6 } : block)),
    );
    expect(output.passages.map(({ passage }) => seconds(passage.phases.onMicros))).toEqual([40, 130, 200]);
    expect(output.passages.every(({ passage }) => passage.axleCount.value === 32)).toBe(true);
    expect(output.health.filter(({ code, state }) => code === 'clock step' && state === 'began')).toHaveLength(1);
  });
});

describe('one block stamped 50 s ahead', () => {
  it('costs no train', () => {
    let count = 0;
    const output = runPipeline(
      DEFINITION,
      blocks((block) => {
        count += 1;
        return count <= 2 ? { ...block, startMicros: block.startMicros + 50e6 } : block;
      }),
    );
    expect(output.passages.map(({ passage }) => seconds(passage.phases.onMicros))).toEqual([40, 130, 200]);
    expect(output.passages.every(({ passage }) => passage.quality === 'good')).toBe(true);
  });
});
