import { availableParallelism } from 'node:os';
import { Worker } from 'node:worker_threads';

/** A worker thread, and how much waits for it. */
export interface Thread {
  worker: Worker;
  blocks: number;
  bytes: number;
  waiting: (() => void)[];
  failures: number;
}

export function release(thread: Thread): void {
  for (const resume of thread.waiting.splice(0)) resume();
}

/** What the threads have taken for their heaps. */
export async function heapBytesOf(threads: readonly Thread[]): Promise<number> {
  // A thread that is just ending, or beginning, has no heap to tell of.
  const heaps = await Promise.all(threads.map(({ worker }) => worker.getHeapStatistics().catch(() => null)));
  return heaps.reduce((sum, heap) => sum + (heap?.total_heap_size ?? 0), 0);
}

/**
 * More threads than a small machine has cores: measuring a passage takes a tenth of a second and more, in which the
 * other bridges of its thread wait, but not those of other threads, since the system gives each its turn.
 */
const LEAST_THREADS = 4;

/** One a bridge, but no more than wanted; where nobody said how many, as many as there are cores, and four at least. */
export function threadsFor(bridges: number, wanted = Math.max(LEAST_THREADS, availableParallelism())): number {
  return Math.max(1, Math.min(wanted, bridges));
}

/** Young objects of a pipeline are few beside its samples; Node's default would let each thread take four times as much. */
const YOUNG_MEGABYTES = 12;

export const newWorker = (): Worker =>
  new Worker(new URL('./worker.ts', import.meta.url), {
    execArgv: [],
    resourceLimits: { maxYoungGenerationSizeMb: YOUNG_MEGABYTES },
  });

export const newThread = (worker: Worker): Thread => ({
  worker,
  blocks: 0,
  bytes: 0,
  waiting: [],
  failures: 0,
});
