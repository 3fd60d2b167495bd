import { spawn, type ChildProcess } from 'node:child_process';
import { once } from 'node:events';
import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { expect, test } from 'vitest';
import { openHistory } from '../../server/history/store.ts';
import { createRandom } from '../support/random.ts';
import { aPassage, aWindow, DAWN } from '../support/specimen.ts';

const KILLS = 12;
const SEED = 41_320;

interface Committer {
  child: ChildProcess;
  /** Number of the newest commit that was acknowledged. */
  acknowledged: () => number;
  lines: () => readonly string[];
  reached: (count: number) => Promise<void>;
}

test(`kill -9 at ${KILLS} moments loses no acknowledged commit and doubles none`, { timeout: 180_000 }, async () => {
  const random = createRandom(SEED);
  const folder = await mkdtemp(join(tmpdir(), 'spanbeat-kill-'));
  try {
    let acknowledged = -1;
    for (let round = 0; round < KILLS; round++) {
      // Each run begins a little before where the last was cut, as a replay does.
      const committer = start(folder, Math.max(0, acknowledged - 2));
      await committer.reached(random.integer(1, 8));
      await new Promise((resolve) => setTimeout(resolve, random.integer(0, 40)));
      committer.child.kill('SIGKILL');
      await once(committer.child, 'exit');
      expect(committer.lines().filter((line) => line.startsWith('complaint'))).toEqual([]);
      acknowledged = Math.max(acknowledged, committer.acknowledged());
    }
    const store = await openHistory({
      file: join(folder, 'history.duckdb'),
      archiveFolder: join(folder, 'archive'),
      clock: () => DAWN,
      report: (complaint) => expect.fail(JSON.stringify(complaint)),
    });
    const { rows, total } = await store.passages({ limit: 1000 });
    expect(new Set(rows.map(({ id }) => id)).size).toBe(total);
    const present = new Set(rows.map(({ onMicros }) => (onMicros - DAWN) / 60_000_000));
    for (let i = 0; i <= acknowledged; i++) expect(present, `seed ${SEED}, commit ${i}`).toContain(i);
    // One more than acknowledged may be there: committed, and killed before it was said.
    expect(total - 1 - acknowledged).toBeLessThanOrEqual(1);
    expect((await store.openAlarms()).length).toBe(total);
    for (const row of rows) {
      const passage = aPassage({ onMicros: row.onMicros, peaks: { A1: 2.5, A2: 2.4 } });
      expect((await store.passage(row.id))?.passage).toEqual(passage);
      expect(await store.waveform(row.id)).toEqual(aWindow(passage, { seconds: 0.5 }));
    }
    await store.close();
  } finally {
    await rm(folder, { recursive: true, force: true });
  }
});

test('a second process on the same file is refused with STORE_LOCKED and disturbs nothing', async () => {
  const folder = await mkdtemp(join(tmpdir(), 'spanbeat-lock-'));
  const committer = start(folder, 0);
  try {
    await committer.reached(1);
    const second = openHistory({
      file: join(folder, 'history.duckdb'),
      archiveFolder: join(folder, 'archive'),
      clock: () => DAWN,
      report: () => undefined,
    });
    await expect(second).rejects.toMatchObject({ code: 'STORE_LOCKED' });
    await committer.reached(committer.acknowledged() + 2);
  } finally {
    committer.child.kill('SIGKILL');
    await rm(folder, { recursive: true, force: true });
  }
});

function start(folder: string, first: number): Committer {
  const script = new URL('committer.ts', import.meta.url).pathname;
  const child = spawn(process.execPath, [script, folder, String(first)], { stdio: ['ignore', 'pipe', 'inherit'] });
  let text = '';
  child.stdout.setEncoding('utf8').on('data', (part: string) => (text += part));
  const lines = (): string[] => text.split('\n').slice(0, -1);
  const done = (): string[] => lines().filter((line) => line.startsWith('done'));
  return {
    child,
    lines,
    acknowledged: () => Number(done().at(-1)?.slice(5) ?? -1),
    async reached(count) {
      while (done().length < count) {
        if (child.exitCode !== null) throw new Error(`the committer ended by itself: ${text}`);
        await once(child.stdout, 'data');
      }
    },
  };
}
