import { describe, expect, it } from 'vitest';
import { createGathering, gather } from '../../server/web/columns.ts';

const STEP = 20_000;
const START = 1_700_000_000_000_000;

describe('columns of the live picture', () => {
  it('show a value of a slow channel as it comes, not when the next one does', () => {
    const seen: [number, number, number][] = [];
    const gathering = createGathering();
    const finished = (number: number, min: number, max: number): void => void seen.push([number, min, max]);
    gather(gathering, STEP, START, 1, Float32Array.of(14.25), finished);
    gather(gathering, STEP, START + 1_000_000, 1, Float32Array.of(14.5), finished);
    expect(seen).toEqual([
      [START / STEP, 14.25, 14.25],
      [(START + 1_000_000) / STEP, 14.5, 14.5],
    ]);
  });

  it('wait for the samples of a fast channel that share one', () => {
    const seen: [number, number, number][] = [];
    const gathering = createGathering();
    const finished = (number: number, min: number, max: number): void => void seen.push([number, min, max]);
    gather(gathering, STEP, START, 500, Float32Array.of(1, -2, 3), finished);
    expect(seen).toEqual([]);
    gather(
      gathering,
      STEP,
      START + 6000,
      500,
      Float32Array.from({ length: 8 }, (_, i) => -i),
      finished,
    );
    expect(seen).toEqual([[START / STEP, -6, 3]]);
  });
});
