import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND, sampleMicros } from '../contract/time.ts';

/** Calibrated samples of one channel, as far back as they may still be needed. Plain data. */
export interface Memory {
  rateHz: number;
  data: Float32Array;
  /** Samples in use: data[head .. head + length). */
  head: number;
  length: number;
  /** Index, since the channel began, of the sample at `head`. */
  first: number;
  /** Stretches without a gap, oldest first; `index` counts since the channel began. */
  runs: { index: number; startMicros: Micros }[];
}

/** The longest stretch that is ever kept; older samples are dropped first. */
export const MEMORY_SECONDS_MOST = 1200;

export function createMemory(rateHz: number): Memory {
  return { rateHz, data: new Float32Array(Math.ceil(rateHz * 4) + 16), head: 0, length: 0, first: 0, runs: [] };
}

/** Appends samples; `startMicros` begins a new run, null continues the last one. */
export function remember(
  memory: Memory,
  samples: Float32Array,
  from: number,
  to: number,
  startMicros: Micros | null,
): void {
  if (startMicros !== null) memory.runs.push({ index: memory.first + memory.length, startMicros });
  const count = to - from;
  makeRoom(memory, count);
  memory.data.set(samples.subarray(from, to), memory.head + memory.length);
  memory.length += count;
  const most = Math.ceil(memory.rateHz * MEMORY_SECONDS_MOST);
  if (memory.length > most) forget(memory, memory.length - most);
}

/** Drops what is older than `micros`, and what was there before the clock went back. */
export function forgetBefore(memory: Memory, micros: Micros): void {
  if (memory.length === 0) return;
  const back = memory.runs.findLastIndex((_, r) => r > 0 && wentBack(memory, r));
  if (back > 0) forget(memory, memory.runs[back]!.index - memory.first);
  let drop = 0;
  for (let r = 0; r < memory.runs.length; r++) {
    const run = memory.runs[r]!;
    const end = r + 1 < memory.runs.length ? memory.runs[r + 1]!.index : memory.first + memory.length;
    const older = Math.floor(((micros - run.startMicros) * memory.rateHz) / MICROS_PER_SECOND);
    if (older <= 0) break;
    drop = Math.min(run.index + older, end) - memory.first;
    if (run.index + older < end) break;
  }
  if (drop > 0) forget(memory, drop);
}

/** Copies of the runs between two times, both in. */
export function recall(
  memory: Memory,
  fromMicros: Micros,
  toMicros: Micros,
): { startMicros: Micros; samples: Float32Array }[] {
  const found: { startMicros: Micros; samples: Float32Array }[] = [];
  memory.runs.forEach((run, r) => {
    const end = r + 1 < memory.runs.length ? memory.runs[r + 1]!.index : memory.first + memory.length;
    const at = (micros: Micros): number => ((micros - run.startMicros) * memory.rateHz) / MICROS_PER_SECOND;
    const from = Math.max(Math.ceil(at(fromMicros) - 1e-6), memory.first - run.index, 0);
    const to = Math.min(Math.floor(at(toMicros) + 1e-6) + 1, end - run.index);
    if (to <= from) return;
    const base = memory.head + run.index - memory.first;
    found.push({
      startMicros: sampleMicros(run.startMicros, from, memory.rateHz),
      samples: memory.data.slice(base + from, base + to),
    });
  });
  return found;
}

/** Whether a run begins before the one before it ends; a clock that is corrected takes back two samples at most. */
function wentBack(memory: Memory, r: number): boolean {
  const [before, run] = [memory.runs[r - 1]!, memory.runs[r]!];
  const endMicros = sampleMicros(before.startMicros, run.index - before.index - 2, memory.rateHz);
  return run.startMicros < endMicros;
}

function forget(memory: Memory, count: number): void {
  const drop = Math.min(count, memory.length);
  memory.head += drop;
  memory.length -= drop;
  memory.first += drop;
  while (memory.runs.length > 1 && memory.runs[1]!.index <= memory.first) memory.runs.shift();
}

function makeRoom(memory: Memory, count: number): void {
  const need = memory.length + count;
  if (memory.head + need <= memory.data.length) return;
  const roomy = need * 2 <= memory.data.length ? memory.data : new Float32Array(need * 2);
  roomy.set(memory.data.subarray(memory.head, memory.head + memory.length));
  memory.data = roomy;
  memory.head = 0;
}
