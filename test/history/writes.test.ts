import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { openDuckDb, type Database } from '../../server/history/database.ts';
import { openHistory } from '../../server/history/store.ts';
import { createWrites } from '../../server/history/writes.ts';
import { aDefinition, aPassage, aWindow, anAlarm, DAWN } from '../support/specimen.ts';

const noPause = (): Promise<void> => Promise.resolve();

describe('the line of writes', () => {
  test('runs them one at a time in the order they came', async () => {
    const writes = createWrites({ limit: 3, report: () => undefined });
    const seen: string[] = [];
    const names = ['a', 'b', 'c', 'd', 'e'];
    const work = (name: string) => async (): Promise<string> => {
      seen.push(`${name} begins`);
      await new Promise((resolve) => setImmediate(resolve));
      seen.push(`${name} ends`);
      return name;
    };
    expect(await Promise.all(names.map((name) => writes.run(work(name))))).toEqual(names);
    expect(seen).toEqual(names.flatMap((name) => [`${name} begins`, `${name} ends`]));
  });

  test('holds no more than its limit: the next one waits for room', async () => {
    const writes = createWrites({ limit: 2, report: () => undefined });
    const started: number[] = [];
    let release = (): void => undefined;
    const gate = new Promise<void>((resolve) => (release = resolve));
    const all = [0, 1, 2, 3].map((i) => writes.run(() => (started.push(i), gate)));
    await new Promise((resolve) => setImmediate(resolve));
    expect(started).toEqual([0]);
    expect(writes.pending()).toBe(4);
    release();
    await Promise.all(all);
    expect(started).toEqual([0, 1, 2, 3]);
    expect(writes.pending()).toBe(0);
  });

  test('tries again with growing pauses up to 30 s, tells each failure with its code, and loses nothing', async () => {
    const pauses: number[] = [];
    const complaints: Complaint[] = [];
    const report = (complaint: Complaint): void => void complaints.push(complaint);
    const pause = (ms: number): Promise<void> => (pauses.push(ms), Promise.resolve());
    const writes = createWrites({ limit: 2, report, pause });
    let left = 11;
    const failing = writes.run(() => {
      left -= 1;
      return left > 0
        ? Promise.reject(new Error(left > 9 ? 'ENOSPC: no space left on device' : 'I/O'))
        : Promise.resolve('kept');
    });
    const behind = writes.run(() => Promise.resolve('also kept'));
    expect(await Promise.all([failing, behind])).toEqual(['kept', 'also kept']);
    expect(pauses).toEqual([100, 200, 400, 800, 1600, 3200, 6400, 12_800, 25_600, 30_000]);
    expect(complaints.map(({ code }) => code)).toEqual(['DISK_FULL', ...Array<string>(9).fill('STORE_WRITE')]);
  });

  test('does not try again what no waiting mends', async () => {
    const writes = createWrites({ limit: 2, report: () => undefined, pause: noPause });
    await expect(writes.run(() => Promise.reject(new Error('Constraint Error: NOT NULL')))).rejects.toThrow('NOT NULL');
    expect(await writes.run(() => Promise.resolve(1))).toBe(1);
  });

  test('gives up a disk that refuses when it is closed, with a code', async () => {
    const writes = createWrites({ limit: 2, report: () => undefined });
    const failing = writes.run(() => Promise.reject(new Error('I/O')));
    const outcome = expect(failing).rejects.toMatchObject({ code: 'STORE_WRITE' });
    await writes.close();
    await writes.close();
    await outcome;
    await expect(writes.run(noPause)).rejects.toMatchObject({ code: 'STORE_WRITE' });
  });
});

/** A database whose n-th statement or commit fails, once or from then on until `mend`. */
async function faulty(
  file: string,
  failAt: number,
  once: boolean,
): Promise<{ database: Database; count: () => number; mend: () => void }> {
  const database = await openDuckDb(file);
  let count = 0;
  let mended = false;
  const step = (): void => {
    count += 1;
    if (!mended && (once ? count === failAt : count >= failAt)) throw new Error('IO Error: the disk said no');
  };
  return {
    count: () => count,
    mend: () => void (mended = true),
    database: {
      ...database,
      transaction: (work) =>
        database.transaction(async (ask) => {
          const result = await work((sql, values) => (step(), ask(sql, values)));
          step(); // stands for the commit
          return result;
        }),
    },
  };
}

describe('a commit whose n-th step fails, for every n', () => {
  test.each([true, false])(
    'is whole in the end, present once, and never half seen (failing once: %s)',
    async (once) => {
      const folder = await mkdtemp(join(tmpdir(), 'spanbeat-faults-'));
      try {
        for (let failAt = 1, met = true; met; failAt++) {
          const file = join(folder, `${failAt}.duckdb`);
          const clean = await openHistory({
            file,
            archiveFolder: join(folder, `${failAt}`),
            clock: () => DAWN,
            report: () => undefined,
          });
          await clean.saveDefinition(aDefinition(), 'id: ottermere', DAWN);
          await clean.close();

          let pauses = 0;
          const faults = await faulty(file, failAt + STEPS_TO_OPEN, once);
          const passage = aPassage();
          const alarms = [anAlarm(DAWN, 'AL', { passage: passage.id })];
          const store = await openHistory({
            file,
            archiveFolder: join(folder, `${failAt}`),
            clock: () => DAWN,
            report: () => undefined,
            openDatabase: () => Promise.resolve(faults.database),
            pause: async () => {
              pauses += 1;
              const seen = [(await store.passage(passage.id)) !== null, (await store.openAlarms()).length === 1];
              expect(seen).toEqual([false, false]);
              if (pauses === 3) faults.mend();
            },
          });
          await store.commitPassage({ passage, channels: aWindow(passage, { seconds: 0.01 }), alarms });
          met = pauses > 0;
          expect((await store.passages({})).total).toBe(1);
          expect(await store.openAlarms()).toEqual(alarms);
          expect(await store.waveform(passage.id)).not.toBeNull();
          if (!met) expect(failAt).toBeGreaterThan(2);
          await store.close();
        }
      } finally {
        await rm(folder, { recursive: true, force: true });
      }
    },
  );
});

/** Statements that bringing an existing database up takes: meta, two reads of it, and the end of that transaction. */
const STEPS_TO_OPEN = 4;
