import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, expect, test } from 'vitest';
import { openDuckDb, type Database } from '../../server/history/database.ts';

let folder: string;
let database: Database;

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'spanbeat-database-'));
  database = await openDuckDb(join(folder, 'x.duckdb'));
});
afterEach(async () => {
  database.close();
  database.close();
  await rm(folder, { recursive: true, force: true });
});

test('numbers beyond 32 bits, fractions, texts, truth and nothing come back as they went in', async () => {
  await database.transaction((ask) =>
    ask('CREATE TABLE t (a BIGINT, b DOUBLE PRECISION, c TEXT, d BOOLEAN, e INTEGER)'),
  );
  const values = [1_796_101_953_200_001, -0.1, "it's µ 橋", true, null];
  await database.transaction((ask) => ask('INSERT INTO t VALUES ($1, $2, $3, $4, $5)', values));
  // The same statement again, with values of other types: a prepared one must not remember the first.
  await database.transaction((ask) => ask('INSERT INTO t VALUES ($1, $2, $3, $4, $5)', [7, 2, null, false, 3]));
  expect((await database.ask('SELECT * FROM t ORDER BY a DESC')).map((row) => Object.values(row))).toEqual([
    values,
    [7, 2, null, false, 3],
  ]);
  expect(await database.ask('SELECT count(*) AS n, sum(a) AS s FROM t')).toEqual([{ n: 2, s: 1_796_101_953_200_008 }]);
});

test('a transaction that fails leaves nothing, and the next one works', async () => {
  await database.transaction((ask) => ask('CREATE TABLE t (a INTEGER PRIMARY KEY)'));
  const failing = database.transaction(async (ask) => {
    await ask('INSERT INTO t VALUES ($1)', [1]);
    await ask('INSERT INTO t VALUES ($1)', [1]);
  });
  await expect(failing).rejects.toThrow(/Constraint/);
  await database.transaction((ask) => ask('INSERT INTO t VALUES ($1)', [2]));
  expect(await database.ask('SELECT a FROM t')).toEqual([{ a: 2 }]);
});

test('many readers at once see what was committed before, while a writer writes', async () => {
  await database.transaction((ask) => ask('CREATE TABLE t (a INTEGER)'));
  for (let i = 0; i < 20; i++) {
    const reading = Promise.all([1, 2, 3].map(() => database.ask('SELECT count(*) AS n FROM t')));
    await database.transaction((ask) => ask('INSERT INTO t VALUES ($1)', [i]));
    for (const [row] of await reading) expect([i, i + 1]).toContain(row?.['n']);
  }
  expect((await database.ask('SELECT count(*) AS n FROM t'))[0]).toEqual({ n: 20 });
});

test('one that no longer answers is opened anew, with all that was committed', async () => {
  await database.transaction((ask) => ask('CREATE TABLE t (a INTEGER)'));
  await database.transaction((ask) => ask('INSERT INTO t VALUES ($1)', [1]));
  // Without its table `meta` it does not answer the question that tells a sound one.
  await database.revive();
  expect(await database.ask('SELECT a FROM t')).toEqual([{ a: 1 }]);
  await database.transaction((ask) => ask('INSERT INTO t VALUES ($1)', [2]));
  expect(await database.ask('SELECT count(*) AS n FROM t')).toEqual([{ n: 2 }]);
  database.close();
  await database.revive();
  await expect(database.ask('SELECT 1 AS one')).rejects.toThrow();
});
