import { describe, expect, it } from 'vitest';
import { createMemory, forgetBefore, MEMORY_SECONDS_MOST, recall, remember } from '#core/passage/memory.ts';

const RATE = 100;
const at = (second: number): number => 5_000_000 + second * 1_000_000;
const ramp = (from: number, count: number): Float32Array => Float32Array.from({ length: count }, (_, i) => from + i);

describe('the memory of one channel', () => {
  it('gives back what it was given, both ends included', () => {
    const memory = createMemory(RATE);
    remember(memory, ramp(0, 1000), 0, 1000, at(0));
    const [run] = recall(memory, at(2), at(3));
    expect(run?.startMicros).toBe(at(2));
    expect([...run!.samples]).toEqual([...ramp(200, 101)]);
  });

  it('keeps runs apart and leaves the gap out', () => {
    const memory = createMemory(RATE);
    remember(memory, ramp(0, 100), 0, 100, at(0));
    remember(memory, ramp(500, 100), 0, 100, at(5));
    remember(memory, ramp(600, 50), 0, 50, null);
    const runs = recall(memory, at(0.9), at(5.2));
    expect(runs.map((run) => [run.startMicros, run.samples.length])).toEqual([
      [at(0.9), 10],
      [at(5), 21],
    ]);
    expect(recall(memory, at(2), at(3))).toEqual([]);
  });

  it('forgets what is older, also across runs, and keeps the rest', () => {
    const memory = createMemory(RATE);
    remember(memory, ramp(0, 100), 0, 100, at(0));
    remember(memory, ramp(500, 100), 0, 100, at(5));
    forgetBefore(memory, at(5.5));
    expect(recall(memory, at(0), at(9)).map((run) => [run.startMicros, run.samples[0]])).toEqual([[at(5.5), 550]]);
    forgetBefore(memory, at(0));
    expect(memory.length).toBe(50);
    forgetBefore(memory, at(60));
    expect(memory.length).toBe(0);
    forgetBefore(memory, at(70));
    expect(recall(memory, at(0), at(90))).toEqual([]);
  });

  it('reuses its room: a long stream with a short memory stays small', () => {
    const memory = createMemory(RATE);
    for (let second = 0; second < 500; second++) {
      remember(memory, ramp(second * 100, 100), 0, 100, second === 0 ? at(0) : null);
      forgetBefore(memory, at(second - 3));
    }
    expect(memory.data.length).toBeLessThan(2000);
    expect(recall(memory, at(499), at(499.5))[0]?.samples[0]).toBe(49_900);
  });

  it('never keeps more than its stated limit', () => {
    const memory = createMemory(1);
    remember(memory, ramp(0, MEMORY_SECONDS_MOST + 100), 0, MEMORY_SECONDS_MOST + 100, at(0));
    expect(memory.length).toBe(MEMORY_SECONDS_MOST);
    expect(recall(memory, at(0), at(100))[0]?.samples[0]).toBe(100);
  });
});
