import { describe, expect, test } from 'vitest';
import { SpanbeatError } from '#core/contract/errors.ts';
import { createCommits, type Commits } from '../../server/history/commits.ts';
import type { Ask } from '../../server/history/database.ts';
import type { Entry } from '../../server/history/ledger.ts';
import { createWrites, type Writes } from '../../server/history/writes.ts';
import { anAlarm, DAWN } from '../support/specimen.ts';

const ask: Ask = () => Promise.resolve([]);
const entry = (seconds: number): Entry => ({ alarm: anAlarm(DAWN + seconds * 1e6) });

/** A database and a ledger in memory; transactions that throw leave nothing. */
function setUp(failures: Error[] = []): {
  commits: Commits;
  writes: Writes;
  stored: number[][];
  ledger: Entry[][];
  store: (value: number) => Promise<number>;
} {
  const stored: number[][] = [];
  const ledger: Entry[][] = [];
  let transaction: number[] = [];
  const writes = createWrites({ limit: 4, report: () => undefined, pause: () => Promise.resolve() });
  const commits = createCommits(
    writes,
    {
      append: (entries) => {
        ledger.push([...entries]);
        return Promise.resolve();
      },
      async *entries() {
        /* not read here */
      },
    },
    {
      async transaction(work) {
        transaction = [];
        const result = await work(ask);
        const failure = failures.shift();
        if (failure !== undefined) throw failure;
        stored.push(transaction);
        return result;
      },
    },
  );
  const store = (value: number): Promise<number> =>
    commits.commit([entry(value)], () => {
      transaction.push(value);
      if (value < 0) return Promise.reject(new Error('Constraint Error: below zero'));
      return Promise.resolve(10 * value);
    });
  return { commits, writes, stored, ledger, store };
}

describe('commits', () => {
  test('that wait for the disk are written together, in order, each with its own answer', async () => {
    const { stored, ledger, store, commits } = setUp();
    const first = store(1);
    await Promise.resolve();
    await Promise.resolve();
    const answers = await Promise.all([first, ...[2, 3, 4, 5].map(store)]);
    expect(answers).toEqual([10, 20, 30, 40, 50]);
    expect(stored.flat()).toEqual([1, 2, 3, 4, 5]);
    expect(stored.length).toBeLessThanOrEqual(2);
    expect(ledger.flat()).toEqual([1, 2, 3, 4, 5].map(entry));
    expect(commits.pending()).toBe(0);
  });

  test('are at most sixty-four in a transaction, however many wait', async () => {
    const { stored, store } = setUp();
    await Promise.all(Array.from({ length: 300 }, (_, i) => store(i)));
    expect(stored.flat()).toEqual(Array.from({ length: 300 }, (_, i) => i));
    expect(Math.max(...stored.map(({ length }) => length))).toBe(64);
  });

  test('fail alone where the mistake is theirs, and the others are stored', async () => {
    const { stored, store } = setUp();
    const results = await Promise.allSettled([1, 2, -3, 4].map(store));
    expect(results.map(({ status }) => status)).toEqual(['fulfilled', 'fulfilled', 'rejected', 'fulfilled']);
    expect(stored).toEqual([[1], [2], [4]]);
  });

  test('are tried again as one where the disk refuses, until it takes them', async () => {
    const { stored, store } = setUp([new Error('IO Error: No space left'), new Error('IO Error: No space left')]);
    expect(await Promise.all([1, 2].map(store))).toEqual([10, 20]);
    expect(stored).toEqual([[1, 2]]);
  });

  test('that were handed in before closing are done, and those after it are refused', async () => {
    const { stored, store, writes } = setUp();
    const held = Promise.all([1, 2, 3].map(store));
    const closing = writes.close();
    expect(await held).toEqual([10, 20, 30]);
    await closing;
    await expect(store(4)).rejects.toBeInstanceOf(SpanbeatError);
    await expect(store(5)).rejects.toBeInstanceOf(SpanbeatError);
    expect(stored.flat()).toEqual([1, 2, 3]);
  });
});
