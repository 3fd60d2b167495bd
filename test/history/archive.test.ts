import { mkdtemp, readdir, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { DuckDBInstance } from '@duckdb/node-api';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { openArchive, placeOf, type Archive, type Sheet } from '../../server/history/archive.ts';
import { forSeeds, seedsFrom } from '../support/random.ts';
import { aDefinition, aPassage, aWindow, DAWN } from '../support/specimen.ts';

let folder: string;
let archive: Archive;

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-archive-'));
  archive = await openArchive(folder);
});
afterEach(async () => {
  archive.close();
  archive.close();
  await rm(folder, { recursive: true, force: true });
});

const sheet = (): Sheet => ({
  passage: aPassage(),
  definition: {
    bridge: 'ottermere',
    version: 3,
    sinceMicros: DAWN - 5,
    text: "name: it's a 'trough' with µ, 橋 and \\ in it\n# ${x} $1 ''\n",
    definition: aDefinition(),
  },
});
const bits = (channels: WindowChannel[] | null): unknown =>
  channels?.map(({ runs, ...rest }) => ({
    ...rest,
    runs: runs.map((run) => [run.startMicros, ...new Uint32Array(run.samples.slice().buffer)]),
  }));

describe('a passage file', () => {
  test('gives every bit of its samples back, zeros of both signs, subnormals and infinities among them', async () => {
    const odd = Float32Array.from([0, -0, 1e-45, -1e-40, 3.4e38, Infinity, -Infinity, NaN, Math.fround(0.1)]);
    const channels: WindowChannel[] = [
      { sensor: 'A1', rateHz: 500, runs: [{ startMicros: DAWN, samples: odd }] },
      { sensor: 'A2', rateHz: 20_000.5, runs: [] },
      {
        sensor: "A'3",
        rateHz: 1 / 3,
        runs: [
          { startMicros: DAWN, samples: odd.subarray(2, 5) },
          { startMicros: DAWN + 1, samples: new Float32Array(0) },
          { startMicros: DAWN + 7, samples: odd.subarray(8) },
        ],
      },
    ];
    await archive.write(sheet(), channels);
    expect(bits(await archive.read(placeOf(aPassage())))).toEqual(bits(channels));
  });

  test('gives random bit patterns of any run length back', async () => {
    const written: [WindowChannel[], number][] = [];
    forSeeds(seedsFrom(1, 5), (random) => {
      const words = Uint32Array.from({ length: random.integer(1, 5000) }, () => random.integer(0, 2 ** 32 - 1));
      // A signalling NaN may come back quiet: no arithmetic tells them apart, and none is a sample.
      const samples = new Float32Array(words.buffer).map((x) => (Number.isNaN(x) ? NaN : x));
      written.push([[{ sensor: 'A1', rateHz: 500, runs: [{ startMicros: DAWN, samples }] }], random.seed]);
    });
    for (const [channels, seed] of written) {
      await archive.write(sheet(), channels);
      expect(bits(await archive.read(placeOf(aPassage()))), `seed ${seed}`).toEqual(bits(channels));
    }
  });

  test('alone suffices to recompute the passage: it carries passage, definition and version', async () => {
    await archive.write(sheet(), aWindow(aPassage()));
    const found = [];
    for await (const one of archive.sheets(() => undefined)) found.push(one);
    expect(found).toEqual([{ ...sheet(), hasWaveform: true }]);
  });

  test('lies by bridge, year and month, can be read by any Parquet reader, and nothing else is left there', async () => {
    await archive.write(sheet(), aWindow(aPassage(), { seconds: 1 }));
    const path = archive.path(placeOf(aPassage()));
    expect(path).toBe(join(folder, 'ottermere/2026/12/ottermere-20261201-051233-2.parquet'));
    expect(await readdir(join(folder, 'ottermere/2026/12'))).toEqual(['ottermere-20261201-051233-2.parquet']);
    const instance = await DuckDBInstance.create(':memory:');
    const connection = await instance.connect();
    const reader = await connection.runAndReadAll(
      `SELECT sensor, rate_hz, len(samples), typeof(samples) FROM '${path}' ORDER BY ALL`,
    );
    expect(reader.getRowsJson()).toEqual([
      ['A1', 500, '500', 'FLOAT[]'],
      ['A2', 500, '500', 'FLOAT[]'],
      ['A2', 500, '500', 'FLOAT[]'],
      ['A3', 500, '500', 'FLOAT[]'],
      ['A4', 500, '500', 'FLOAT[]'],
    ]);
    connection.closeSync();
    instance.closeSync();
  });

  test('that is thinned keeps its sheet and gives no wave form', async () => {
    await archive.write(sheet(), aWindow(aPassage()));
    expect(await archive.thin(placeOf(aPassage()), sheet())).toBeGreaterThan(10_000);
    expect(await archive.read(placeOf(aPassage()))).toBeNull();
    const found = [];
    for await (const one of archive.sheets(() => undefined)) found.push(one.hasWaveform);
    expect(found).toEqual([false]);
  });

  test('that is missing or broken is told, and the others are still found', async () => {
    expect(await archive.read(placeOf(aPassage()))).toBeNull();
    expect(await archive.thin(placeOf(aPassage()), sheet())).toBe(0);
    await archive.write(sheet(), []);
    await writeFile(join(folder, 'ottermere/2026/12/a.parquet'), 'PAR1 no file PAR1');
    await writeFile(join(folder, 'ottermere/2026/12/b.parquet.part'), 'cut short');
    const broken: string[] = [];
    let found = 0;
    for await (const one of archive.sheets((path) => broken.push(path))) found += one.passage.id.length > 0 ? 1 : 0;
    expect(found).toBe(1);
    expect(broken).toEqual([join(folder, 'ottermere/2026/12/a.parquet')]);
  });
});

test('a failed write is told to its caller and does not spoil the next one', async () => {
  await writeFile(join(folder, 'fennick'), 'a file where a folder should be');
  const blocked = { ...sheet(), passage: aPassage({ bridge: 'fennick' }) };
  const failing = archive.write(blocked, []);
  const next = archive.write(sheet(), aWindow(aPassage()));
  await expect(failing).rejects.toThrow();
  await next;
  expect(await archive.read(placeOf(aPassage()))).not.toBeNull();
});
