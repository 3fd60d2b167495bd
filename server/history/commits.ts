import type { Ask, Database } from './database.ts';
import type { Entry, Ledger } from './ledger.ts';
import { isOurMistake, type Writes } from './writes.ts';

export interface Commits {
  /** Written down in the ledger, then done in the database, in its turn and until it succeeds. */
  commit<T>(entries: readonly Entry[], work: (ask: Ask) => Promise<T>): Promise<T>;
  /** Handed in and not yet done. */
  pending(): number;
}

/** Most that are written together: what waits behind them is not to wait long. */
const TOGETHER = 64;

/**
 * One train may change its alarms a hundred times within seconds, and each sync of the disk takes some milliseconds: what
 * is handed in while another write is under way waits together and becomes one write to the ledger and one transaction.
 * What fails by a mistake of ours fails alone.
 */
export function createCommits(writes: Writes, ledger: Ledger, database: Pick<Database, 'transaction'>): Commits {
  /** Handed in to the line of writes, but its turn has not come: more may join. */
  let open: Waiting[] | null = null;
  let pending = 0;

  const writeTogether = async (some: readonly Waiting[]): Promise<void> => {
    await ledger.append(some.flatMap(({ entries }) => entries));
    const values = await database.transaction(async (ask) => {
      const values: unknown[] = [];
      for (const { work } of some) values.push(await work(ask));
      return values;
    });
    for (const [index, one] of some.entries()) one.outcome = { value: values[index] };
  };
  const write = async (batch: readonly Waiting[]): Promise<void> => {
    const left = batch.filter(({ outcome }) => outcome === null);
    try {
      await writeTogether(left);
      return;
    } catch (failure) {
      if (!isOurMistake(failure)) throw failure;
    }
    for (const one of left) {
      await writeTogether([one]).catch((failure: unknown) => {
        if (!isOurMistake(failure)) throw failure;
        one.outcome = { failure };
      });
    }
  };
  const run = async (batch: readonly Waiting[]): Promise<void> => {
    let closed: unknown = null;
    await writes
      .run(() => {
        if (open === batch) open = null;
        return write(batch);
      })
      .catch((failure: unknown) => (closed = failure));
    if (open === batch) open = null;
    pending -= batch.length;
    for (const { outcome, resolve, reject } of batch) {
      if (outcome !== null && 'value' in outcome) resolve(outcome.value);
      else reject(outcome?.failure ?? closed);
    }
  };

  return {
    commit<T>(entries: readonly Entry[], work: (ask: Ask) => Promise<T>): Promise<T> {
      return new Promise<unknown>((resolve, reject) => {
        const one: Waiting = { entries, work, outcome: null, resolve, reject };
        pending += 1;
        if (open !== null && open.length < TOGETHER) {
          open.push(one);
          return;
        }
        open = [one];
        void run(open);
      }) as Promise<T>;
    },
    pending: () => pending,
  };
}

interface Waiting {
  entries: readonly Entry[];
  work: (ask: Ask) => Promise<unknown>;
  outcome: { value: unknown } | { failure: unknown } | null;
  resolve: (value: unknown) => void;
  reject: (failure: unknown) => void;
}
