import { expect, it } from 'vitest';
import type { Alarm } from '#core/contract/alarm.ts';
import type { SensorCondition, SensorHealth } from '#core/contract/health.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { createWatch } from '../../server/watch.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

const definition = aDefinition();
const sensor = definition.sensors[0]!.id;

function watchOf(alarms: readonly Alarm[]) {
  const told: Alarm[] = [];
  const watch = createWatch({
    definition,
    version: 1,
    alarms,
    lastPassage: null,
    clock: () => DAWN + 60_000_000,
    effects: {
      alarms: (changed) => Promise.resolve(void told.push(...changed)),
      passage: () => Promise.resolve(),
      noData: () => Promise.resolve(),
      health: () => undefined,
    },
    report: () => undefined,
  });
  return { watch, told };
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
