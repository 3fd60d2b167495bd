import { mkdir, open, readdir, readFile } from 'node:fs/promises';
import { dirname, join } from 'node:path';
import type { NoData } from '#core/alarm/state.ts';
import type { Alarm } from '#core/contract/alarm.ts';

/** What is written down of one bridge beside its wave forms. */
export type Entry = { alarm: Alarm } | { noData: NoData };

/**
 * A second, plain copy of what people answered and of when nobody was looking: `<folder>/<bridge>/ledger.jsonl`, one JSON
 * line a change, only ever added to. The database is asked; the ledger is read only to fill a new database.
 */
export interface Ledger {
  /** Durable when it resolves. */
  append(entries: readonly Entry[]): Promise<void>;
  /** All entries in the order they were written. A line cut by a crash, or damaged, goes to `damaged`. */
  entries(damaged: (path: string, reason: string) => void): AsyncGenerator<Entry>;
}

const FILE = 'ledger.jsonl';

export function createLedger(folder: string): Ledger {
  return {
    async append(entries) {
      const byBridge = Map.groupBy(entries, (entry) => ('alarm' in entry ? entry.alarm.bridge : entry.noData.bridge));
      for (const [bridge, own] of byBridge) {
        await appendLines(
          join(folder, bridge, FILE),
          own.map((entry) => JSON.stringify(entry)),
        );
      }
    },
    async *entries(damaged) {
      for (const entry of await readdir(folder, { withFileTypes: true })) {
        const path = join(folder, entry.name, FILE);
        const text = entry.isDirectory() ? await textOf(path) : '';
        for (const [index, line] of text.split('\n').entries()) {
          if (line === '') continue;
          const read = parsed(line);
          if (read === null) damaged(path, `line ${index + 1} is no entry`);
          else yield read;
        }
      }
    },
  };
}

async function appendLines(path: string, lines: string[]): Promise<void> {
  await mkdir(dirname(path), { recursive: true });
  const file = await open(path, 'a');
  try {
    // A line cut by an earlier crash is ended first, so that it spoils no other.
    await file.write(`\n${lines.join('\n')}\n`);
    await file.datasync();
  } finally {
    await file.close();
  }
}

function parsed(line: string): Entry | null {
  try {
    const value: unknown = JSON.parse(line);
    if (typeof value !== 'object' || value === null) return null;
    return 'alarm' in value || 'noData' in value ? (value as Entry) : null;
  } catch {
    return null; // told by the caller as damaged
  }
}

const textOf = (path: string): Promise<string> =>
  readFile(path, 'utf8').catch((failure: unknown) => {
    if (failure instanceof Error && 'code' in failure && failure.code === 'ENOENT') return '';
    throw failure;
  });
