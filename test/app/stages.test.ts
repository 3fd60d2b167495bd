import { describe, expect, test } from 'vitest';
import { createStages } from '../../server/stages.ts';

describe('durations of stages', () => {
  test('are told as median, 99th percentile and longest, within one hundredth', () => {
    const stages = createStages();
    for (let ms = 1; ms <= 1000; ms++) stages.note('queue', ms);
    const queue = stages.figures().find(({ stage }) => stage === 'queue')!;
    expect(queue.count).toBe(1000);
    expect(Math.abs(queue.p50Ms / 500 - 1)).toBeLessThan(0.01);
    expect(Math.abs(queue.p99Ms / 990 - 1)).toBeLessThan(0.01);
    expect(Math.abs(queue.longestMs / 1000 - 1)).toBeLessThan(0.01);
  });

  test('of a stage that nothing came through are no number, and clocks that differ a little do no harm', () => {
    const stages = createStages();
    stages.note('return', -0.2);
    stages.note('return', 1e12);
    const [step, back] = ['step', 'return'].map((name) => stages.figures().find(({ stage }) => stage === name)!);
    expect(step).toEqual({ stage: 'step', count: 0, p50Ms: NaN, p99Ms: NaN, longestMs: NaN });
    expect(back?.count).toBe(2);
  });
});
