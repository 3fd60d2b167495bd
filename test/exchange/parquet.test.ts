import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { readFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { DuckDBInstance } from '@duckdb/node-api';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { PassageWindow } from '#core/contract/pipeline.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { createPipeline, finish, recompute, step } from '#core/passage/pipeline.ts';
import { gatherWhole } from '../../server/command/whole.ts';
import { decodeDefinition } from '../../server/definition.ts';
import { openRecording } from '../../server/exchange/opening.ts';
import { joinRecordings } from '../../server/exchange/recording.ts';
import { openArchive, placeOf } from '../../server/history/archive.ts';
import { DEMONSTRATION_FILES, pastPassages } from '../../simulator/demonstration.ts';
import { collect } from '../support/collect.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

let folder = '';
beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-parquet-'));
});
afterAll(() => rm(folder, { recursive: true }));

async function parquet(name: string, select: string): Promise<string> {
  const file = join(folder, name);
  const instance = await DuckDBInstance.create(':memory:');
  const connection = await instance.connect();
  await connection.run(`COPY (${select}) TO '${file}' (FORMAT parquet)`);
  connection.closeSync();
  instance.closeSync();
  return file;
}

function bridge(): ReturnType<typeof aDefinition> {
  const definition = aDefinition();
  return {
    ...definition,
    sensors: definition.sensors.map((each) => (each.quantity === 'acceleration' ? { ...each, rateHz: 100 } : each)),
  };
}

async function read(file: string, startMicros: number | null = null): Promise<SampleBlock[]> {
  const recording = await openRecording(file, bridge(), { startMicros });
  return collect(recording.blocks);
}

function samplesOf(blocks: readonly SampleBlock[], sensor: string): number[] {
  return blocks.flatMap(({ channels }) =>
    channels.flatMap((each) => (each.sensor === sensor ? [...each.samples] : [])),
  );
}

async function codeOf(reading: Promise<unknown>): Promise<string> {
  const error: unknown = await reading.then(
    () => null,
    (reason: unknown) => reason,
  );
  if (!(error instanceof SpanbeatError)) throw new Error(`expected a complaint, got ${String(error)}`);
  return error.code;
}

describe("a passage's archived wave form", () => {
  const definitions = DEMONSTRATION_FILES.map((url) => {
    const text = readFileSync(url, 'utf8');
    const reading = decodeDefinition(text, url.pathname);
    if (!reading.ok) throw new Error(JSON.stringify(reading.complaints));
    return reading.value;
  });

  it.each(definitions.map((given) => [given.definition.id, given] as const))(
    'comes back bit for bit, and the passage computed from it too: %s',
    async (id, { definition, text }) => {
      const [past] = pastPassages({ definitions: [definition], nowMicros: DAWN, days: 1, perDay: 2, seed: 7 });
      if (past === undefined) throw new Error('no passage');
      const state = createPipeline(definition, 3);
      const windows: PassageWindow[] = [];
      for (const block of past.blocks) windows.push(...step(state, block).passages);
      windows.push(...finish(state).passages);
      expect(windows).toHaveLength(1);
      const [{ passage, channels }] = windows as [PassageWindow];

      const archive = await openArchive(join(folder, id));
      const stored = { bridge: id, version: 3, sinceMicros: DAWN, text, definition };
      await archive.write({ passage, definition: stored }, channels);
      const recording = await openRecording(archive.path(placeOf(passage)), definition, { startMicros: null });
      expect([...recording.units.values()].every((unit) => ['m/s²', 'µm/m', '°C'].includes(unit))).toBe(true);
      const joined = joinRecordings([recording], definition);
      const again = await gatherWhole(joined.definition, joined.blocks);
      archive.close();

      const withSamples = channels.filter(({ runs }) => runs.length > 0);
      expect(again.filter(({ runs }) => runs.length > 0)).toEqual(withSamples);
      expect(recompute(joined.definition, 3, passage, again)).toEqual(passage);
    },
  );

  it('that was thinned says so', async () => {
    const file = await parquet(
      'thinned.parquet',
      "SELECT 'A1' AS sensor, CAST(NULL AS BIGINT) AS start_micros, 100::DOUBLE AS rate_hz, CAST([] AS FLOAT[]) AS samples",
    );
    expect(await codeOf(read(file))).toBe('RECORDING_NO_CHANNEL');
  });

  it('of another rate is refused', async () => {
    const file = await parquet(
      'rate.parquet',
      `SELECT 'A1' AS sensor, ${DAWN}::BIGINT AS start_micros, 128::DOUBLE AS rate_hz, CAST([1, 2] AS FLOAT[]) AS samples`,
    );
    expect(await codeOf(read(file))).toBe('RATE_WRONG');
  });
});

describe('a plain table in Parquet', () => {
  const rows = 'FROM range(250) t(i)';

  it.each([
    ['a timestamp', `make_timestamp(${DAWN} + i * 10000) AS time`],
    ['a timestamp with zone', `make_timestamp(${DAWN} + i * 10000)::TIMESTAMPTZ AS time`],
    ['ISO 8601 text', `strftime(make_timestamp(${DAWN} + i * 10000), '%Y-%m-%dT%H:%M:%S.%f') AS time`],
    ['epoch microseconds', `${DAWN} + i * 10000 AS time`],
    ['epoch seconds', `(${DAWN} + i * 10000) / 1e6 AS time`],
    ['seconds from a start', 'i / 100 AS time'],
    ['milliseconds from a start', 'i * 10 AS "time [ms]"'],
  ])('is read with its time as %s', async (name, time) => {
    const file = await parquet(
      `${name}.parquet`,
      `SELECT ${time}, i::DOUBLE AS A1, (-i)::FLOAT AS A2, 'x' AS note ${rows}`,
    );
    const blocks = await read(file, name.includes('start') ? DAWN : null);
    expect(blocks[0]?.startMicros).toBe(DAWN);
    expect(samplesOf(blocks, 'A1')).toEqual(Array.from({ length: 250 }, (_, i) => i));
    expect(samplesOf(blocks, 'A2')[249]).toBe(-249);
  });

  it('makes a gap of null and keeps NaN', async () => {
    const file = await parquet(
      'null.parquet',
      `SELECT ${DAWN} + i * 10000 AS time, CASE WHEN i = 5 THEN NULL WHEN i = 7 THEN 'NaN'::DOUBLE ELSE i END AS A1 FROM range(10) t(i)`,
    );
    const blocks = await read(file);
    expect(blocks.map(({ startMicros }) => (startMicros - DAWN) / 10_000)).toEqual([0, 6]);
    expect(samplesOf(blocks, 'A1')).toEqual([0, 1, 2, 3, 4, 6, NaN, 8, 9]);
  });

  it('says the units of its columns', async () => {
    const file = await parquet('unit.parquet', `SELECT ${DAWN} + i * 10000 AS time, i AS "A1 [mg]" ${rows}`);
    const recording = await openRecording(file, bridge(), { startMicros: null });
    expect([...recording.units]).toEqual([['A1', 'mg']]);
    await collect(recording.blocks);
  });

  it.each([
    ['no sensor', 'RECORDING_NO_CHANNEL', `SELECT ${DAWN} + i AS time, i AS B1 ${rows}`],
    ['no time', 'RECORDING_TIME', `SELECT i AS A1, i AS A2 ${rows}`],
    ['a time from an unknown start', 'RECORDING_TIME', `SELECT i / 100 AS time, i AS A1 ${rows}`],
    ['a time that is no time', 'RECORDING_TIME', `SELECT [i] AS time, i AS A1 ${rows}`],
    ['text where samples belong', 'RECORDING_FORMAT', `SELECT ${DAWN} + i * 10000 AS time, 'much' AS A1 ${rows}`],
    ['no row', 'RECORDING_FORMAT', `SELECT ${DAWN} + i AS time, i AS A1 FROM range(0) t(i)`],
    ['another rate', 'RATE_WRONG', `SELECT ${DAWN} + i * 5000 AS time, i AS A1 ${rows}`],
  ])('is refused with %s', async (name, code, select) => {
    expect(await codeOf(read(await parquet(`bad ${name}.parquet`, select)))).toBe(code);
  });

  it('that is damaged is refused', async () => {
    const file = join(folder, 'damaged.parquet');
    await writeFile(file, `PAR1${'x'.repeat(1000)}PAR1`);
    expect(await codeOf(read(file))).toBe('RECORDING_FORMAT');
  });
});
