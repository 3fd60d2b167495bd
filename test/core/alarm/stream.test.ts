import { beforeAll, describe, expect, test } from 'vitest';
import { eventsOf, nextAll, openDesk } from '#core/alarm/desk.ts';
import type { DeskState } from '#core/alarm/state.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { severityRank } from '#core/contract/severity.ts';
import { createPipeline, finish, step } from '#core/passage/pipeline.ts';
import { bridgeParameters } from '../../../simulator/parameters.ts';
import { simulate } from '../../../simulator/scene.ts';
import type { SimulatedChannel } from '../../../simulator/simulation.ts';
import { createTrain } from '../../../simulator/train.ts';
import { plainBridge } from '../../support/bridges.ts';
import { blocksOf } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const SPLITS_S = [0.05, 0.5, 7];

/** Limits low enough that both trains pass them. */
const BRIDGE = plainBridge({
  limits: [{ ...plainBridge().limits[0]!, levels: { AL: 0.1, IL: 0.25, IAL: 50 } }],
});

function outputsOf(channels: readonly SimulatedChannel[], blockSeconds: number): PipelineOutput[] {
  const pipeline = createPipeline(BRIDGE, 1);
  const outputs = [...blocksOf(BRIDGE.id, channels, blockSeconds)].map((block) => step(pipeline, block));
  return [...outputs, finish(pipeline)];
}

function deskAfter(outputs: readonly PipelineOutput[]): DeskState {
  return outputs.reduce(
    (desk, output) => nextAll(desk, eventsOf(BRIDGE.id, output), FROM).state,
    openDesk({ definition: BRIDGE, nowMicros: FROM }),
  );
}

const BLOW = {
  kind: 'blow' as const,
  micros: FROM + 50e6,
  alongM: 9,
  acrossM: 0,
  peakKn: 15,
  lengthS: 0.006,
};

const levelAlarms = ({ alarms }: DeskState): Alarm[] => Object.values(alarms).filter(({ kind }) => kind === 'level');

/** Steps stand in the order in which they were taken, which the size of blocks may turn round; event time does not. */
const inEventTime = ({ alarms }: DeskState): Alarm[] =>
  Object.values(alarms).map((alarm) => ({
    ...alarm,
    steps: alarm.steps.toSorted((a, b) => a.micros - b.micros || (a.what < b.what ? -1 : 1)),
  }));

describe('two simulated trains and a blow that pass the limits', () => {
  let streams: PipelineOutput[][];
  let desks: DeskState[];
  beforeAll(() => {
    const train = (second: number, type: 'intercity' | 'light engine') => ({
      kind: 'passage' as const,
      train: createTrain(type, 7),
      onMicros: FROM + second * 1e6,
      speedMs: 38,
      direction: 'rising' as const,
    });
    const { channels } = simulate({
      definition: BRIDGE,
      parameters: bridgeParameters(BRIDGE),
      seed: 42,
      fromMicros: FROM,
      toMicros: FROM + 120e6,
      events: [train(20, 'intercity'), BLOW, train(75, 'light engine')],
    });
    streams = SPLITS_S.map((seconds) => outputsOf(channels, seconds));
    desks = streams.map(deskAfter);
  });

  test('leave one alarm each, with both values and a verdict', () => {
    const alarms = levelAlarms(desks[0]!);
    expect(alarms).toHaveLength(3);
    expect(new Set(alarms.map(({ passage }) => passage)).size).toBe(3);
    for (const alarm of alarms) {
      expect(alarm).toMatchObject({ state: 'returned to normal, unacknowledged', rule: 'deck' });
      expect(['confirmed', 'corrected']).toContain(alarm.verdict);
      expect(severityRank(alarm.severity)).toBeGreaterThan(0);
      // Causal and zero-phase low-pass of the same cut-off see the same vibration: of one size, not of one value.
      expect(alarm.liveValue! / alarm.recordValue!).toBeGreaterThan(0.5);
      expect(alarm.liveValue! / alarm.recordValue!).toBeLessThan(2);
    }
  });

  test('leave one of the blow that says that no train was recognised, and does not count it as one', () => {
    const [blow, ...others] = levelAlarms(desks[0]!).filter(({ doubt }) => doubt?.includes('no train was recognised'));
    expect(others).toEqual([]);
    expect(Math.abs(blow!.raisedMicros - BLOW.micros)).toBeLessThan(1e6);
    const last = levelAlarms(desks[0]!).toSorted((a, b) => b.raisedMicros - a.raisedMicros)[0]!;
    expect(last.passagesAboveInDay).toBe(1);
  });

  test.each(SPLITS_S)('no passage reaches back into time that was settled, in blocks of %s s', (seconds) => {
    let settledMicros = 0;
    for (const output of streams[SPLITS_S.indexOf(seconds)]!) {
      for (const { passage } of output.passages) expect(passage.startMicros).toBeGreaterThanOrEqual(settledMicros);
      settledMicros = Math.max(settledMicros, output.settledMicros ?? 0);
    }
    expect(settledMicros).toBeGreaterThan(FROM + 100e6);
  });

  test.each(SPLITS_S.slice(1))('leave the same alarms when blocks are of %s s', (seconds) => {
    expect(inEventTime(desks[SPLITS_S.indexOf(seconds)]!)).toEqual(inEventTime(desks[0]!));
  });
});
