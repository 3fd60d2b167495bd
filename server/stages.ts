import { createHistogram, type RecordableHistogram } from 'node:perf_hooks';

/** Stretches of a block's way, so that a late alarm can be traced to what held it up. */
export const STAGES = {
  journal: 'From the arrival of a message to its being on the disk; alarms do not wait for it',
  queue: 'From the arrival of a block to its turn in the worker thread',
  step: 'In the pipeline; the longest are those that end a passage',
  return: 'From the worker thread back to the main thread',
  tell: 'Alarm desk and handing alarms to the sockets, for blocks that passed a limit',
} as const;

export type Stage = keyof typeof STAGES;

export interface StageFigures {
  stage: Stage;
  count: number;
  p50Ms: number;
  p99Ms: number;
  longestMs: number;
}

/** Durations since the start, in histograms of fixed size. */
export interface Stages {
  note(stage: Stage, ms: number): void;
  figures(): StageFigures[];
}

const LONGEST_US = 3_600_000_000;

export function createStages(): Stages {
  const names = Object.keys(STAGES) as Stage[];
  const histograms = Object.fromEntries(
    names.map((stage) => [stage, createHistogram({ lowest: 1, highest: LONGEST_US, figures: 2 })]),
  ) as Record<Stage, RecordableHistogram>;
  return {
    // A histogram takes integers from 1 on.
    note: (stage, ms) => histograms[stage].record(Math.min(LONGEST_US, Math.max(1, Math.round(ms * 1000)))),
    figures: () =>
      names.map((stage) => {
        const { count, max } = histograms[stage];
        const at = (percentile: number): number =>
          count === 0 ? NaN : histograms[stage].percentile(percentile) / 1000;
        return { stage, count, p50Ms: at(50), p99Ms: at(99), longestMs: count === 0 ? NaN : max / 1000 };
      }),
  };
}

/** Now, on a clock that the threads of a process share, ms. */
export const sharedMs = (): number => performance.timeOrigin + performance.now();
