import { expect, it } from 'vitest';
import type { Alarm } from '#core/contract/alarm.ts';
import type { SensorCondition, SensorHealth } from '#core/contract/health.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { createWatch } from '../../server/watch.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

const definition = aDefinition();
const sensor = definition.sensors[0]!.id;

const S = 1_000_000;

function watchOf(alarms: readonly Alarm[]) {
  const told: Alarm[] = [];
  const wall = { micros: DAWN + 60 * S };
  const watch = createWatch({
    definition,
    version: 1,
    alarms,
    lastPassage: null,
    clock: () => wall.micros,
    effects: {
      alarms: (changed) => Promise.resolve(void told.push(...changed)),
      passage: () => Promise.resolve(),
      noData: () => Promise.resolve(),
      health: () => undefined,
    },
    report: () => undefined,
  });
  return { watch, told, wall };
}

const condition = (
  code: SensorCondition['code'],
  state: SensorCondition['state'],
  seconds: number,
): SensorCondition => ({
  bridge: definition.id,
  sensor,
  code,
  state,
  micros: DAWN + seconds * 1_000_000,
  detail: code,
});

const saying = (...health: SensorCondition[]): PipelineOutput => ({
  levels: [],
  passages: [],
  progress: [],
  axles: [],
  spectra: [],
  health,
  vitals: [],
  settledMicros: null,
  live: [],
});

it('a restarted watch knows which conditions of its sensors still last, and ends their alarm with the last of them', async () => {
  const before = watchOf([]);
  await before.watch.take(saying(condition('flat', 'began', 1), condition('noise high', 'began', 2)), false);
  const raised = before.told.at(-1)!;
  expect(raised).toMatchObject({ kind: 'sensor', rule: sensor, state: 'unacknowledged' });

  const after = watchOf([raised]);
  const sensors: SensorHealth[] = structuredClone(before.watch.remember().sensors);
  after.watch.recall({ loggers: {}, sensors });
  await after.watch.take(saying(condition('flat', 'ended', 10)), false);
  expect(after.told).toEqual([]);
  await after.watch.take(saying(condition('noise high', 'ended', 11)), false);
  expect(after.told.at(-1)).toMatchObject({ id: raised.id, returnedMicros: DAWN + 11_000_000 });
});

/** A block of the logger with a second of samples of some sensors, which comes at once; then the clock ticks. */
function second({ watch, wall }: ReturnType<typeof watchOf>, sensors: readonly string[], value = 0): void {
  const channels = sensors.map((id) => ({ sensor: id, samples: new Float64Array(500).fill(value) }));
  const startMicros = wall.micros - S;
  watch.given({ bridge: definition.id, logger: 'north', startMicros, rateHz: 500, sequence: null, channels }, null);
  watch.tick();
  wall.micros += S;
}

it('a sensor that falls silent while its logger sends is an alarm after silentAfterS, and over when it is heard again', () => {
  const run = watchOf([]);
  for (let i = 0; i < 3; i++) second(run, ['A1', 'A2']);
  for (let i = 0; i < 10; i++) second(run, ['A2']);
  expect(run.told).toEqual([]);
  for (let i = 0; i < 5; i++) second(run, ['A2']);
  expect(run.told).toHaveLength(1);
  expect(run.told[0]).toMatchObject({ kind: 'sensor', rule: 'A1', state: 'unacknowledged' });
  // The last sample of A1 came 2 ms before the third second was over; silentAfterS is 10 s.
  expect(run.told[0]?.raisedMicros).toBe(DAWN + 72 * S - 2000);
  expect(run.told[0]?.message).toContain('marked "silent" (no sample for more than 10 s, though its logger sends)');
  second(run, ['A1', 'A2']);
  expect(run.told.at(-1)).toMatchObject({ id: run.told[0]?.id, state: 'returned to normal, unacknowledged' });
});

it('a sensor that sends nothing but "not a number" is silent too', () => {
  const run = watchOf([]);
  second(run, ['A1', 'A2']);
  for (let i = 0; i < 15; i++) {
    second(run, ['A1'], NaN);
    run.wall.micros -= S;
    second(run, ['A2']);
  }
  expect(run.told.map(({ rule }) => rule)).toEqual(['A1']);
});

it('the silence of a logger is one alarm, not one a sensor, and its sensors get their time when it is back', () => {
  const run = watchOf([]);
  for (let i = 0; i < 3; i++) second(run, ['A1', 'A2']);
  for (let i = 0; i < 60; i++) {
    run.watch.tick();
    run.wall.micros += S;
  }
  for (let i = 0; i < 5; i++) second(run, ['A2']);
  expect(run.told.map(({ kind, state }) => [kind, state])).toEqual([
    ['no data', 'unacknowledged'],
    ['no data', 'returned to normal, unacknowledged'],
  ]);
  for (let i = 0; i < 10; i++) second(run, ['A2']);
  expect(run.told.at(-1)).toMatchObject({ kind: 'sensor', rule: 'A1' });
});

it('a silence that began before a restart is not announced again, and is over when the sensor is heard', () => {
  const before = watchOf([]);
  second(before, ['A1', 'A2']);
  for (let i = 0; i < 15; i++) second(before, ['A2']);
  const raised = before.told.at(-1)!;
  const after = watchOf([raised]);
  after.watch.recall(structuredClone(before.watch.remember()));
  after.wall.micros = before.wall.micros;
  for (let i = 0; i < 15; i++) second(after, ['A2']);
  expect(after.told).toEqual([]);
  second(after, ['A1', 'A2']);
  expect(after.told.at(-1)).toMatchObject({ id: raised.id, state: 'returned to normal, unacknowledged' });
});
