import { setTimeout as sleep } from 'node:timers/promises';
import { SpanbeatError, type ErrorCode } from '#core/contract/errors.ts';
import type { Report } from '../report.ts';

export interface Writes {
  /**
   * Runs the work after all that was handed in before it, and again with growing pauses until it succeeds. At most
   * `limit` works are held; beyond, handing one in waits for room, which is the back-pressure on the caller.
   *
   * @throws SpanbeatError STORE_WRITE where `close` came before it could succeed; what the work throws where trying again
   * cannot help (a mistake of ours, not of the disk)
   */
  run<T>(work: () => Promise<T>): Promise<T>;
  /** Handed in and not yet done. */
  pending(): number;
  /** Waits for what is held, but not for a disk that refuses: that is given up after one more try. */
  close(): Promise<void>;
}

interface WritesOptions {
  limit: number;
  report: Report;
  /** Between two tries. */
  recover?: () => Promise<void>;
  /** For tests; real time where absent. */
  pause?: (ms: number, signal: AbortSignal) => Promise<void>;
}

const FIRST_PAUSE_MS = 100;
const LONGEST_PAUSE_MS = 30_000;

/** A bounded line of writes, one at a time. Nothing that was taken is lost while the process lives. */
export function createWrites({ limit, report, recover, pause = wait }: WritesOptions): Writes {
  let held = 0;
  let last: Promise<unknown> = Promise.resolve();
  const waiting: (() => void)[] = [];
  const closing = new AbortController();

  async function persist<T>(work: () => Promise<T>): Promise<T> {
    for (let pauseMs = FIRST_PAUSE_MS; ; pauseMs = Math.min(2 * pauseMs, LONGEST_PAUSE_MS)) {
      try {
        return await work();
      } catch (failure) {
        if (isOurMistake(failure)) throw failure;
        const complaint = { code: codeOf(failure), detail: textOf(failure) };
        report(complaint);
        if (closing.signal.aborted) throw new SpanbeatError(complaint);
      }
      await pause(pauseMs, closing.signal);
      await recover?.().catch((failure: unknown) => report({ code: codeOf(failure), detail: textOf(failure) }));
    }
  }

  return {
    async run(work) {
      if (closing.signal.aborted) throw new SpanbeatError({ code: 'STORE_WRITE', detail: 'the history is closed' });
      while (held >= limit) await new Promise<void>((resume) => waiting.push(resume));
      held += 1;
      const task = last.then(() => persist(work));
      last = task.catch(() => undefined); // told to the caller of this one; the next is not to suffer from it
      try {
        return await task;
      } finally {
        held -= 1;
        waiting.shift()?.();
      }
    },
    pending: () => held + waiting.length,
    async close() {
      closing.abort();
      while (held + waiting.length > 0) {
        await last;
        await new Promise<void>((resume) => setImmediate(resume));
      }
    },
  };
}

/** DuckDB's and PostgreSQL's words for what no waiting mends: constraints, types, names, syntax. */
export function isOurMistake(failure: unknown): boolean {
  if (failure instanceof SpanbeatError || failure instanceof TypeError || failure instanceof RangeError) return true;
  return /^(Constraint|Conversion|Binder|Parser|Catalog|Invalid Input|Not implemented|Invalid) Error/i.test(
    textOf(failure),
  );
}

function codeOf(failure: unknown): ErrorCode {
  return /ENOSPC|EDQUOT|no space|disk full|out of disk|not enough space/i.test(textOf(failure))
    ? 'DISK_FULL'
    : 'STORE_WRITE';
}

const textOf = (failure: unknown): string => (failure instanceof Error ? failure.message : String(failure));

async function wait(ms: number, signal: AbortSignal): Promise<void> {
  await sleep(ms, undefined, { signal }).catch(() => undefined); // cut short by close: that is what the signal is for
}
