import { describe, expect, it } from 'vitest';
import { fillHole, fillStraight } from '#core/signal/hole.ts';

const RECORD = 64;

/** A sine with an offset, samples missing from 30 on; and what was there. */
function spoilt(
  cyclesASample: number,
  phase: number,
  count: number,
  offset = 0,
): [x: Float64Array, there: Float64Array] {
  const there = Float64Array.from(
    { length: RECORD },
    (_, i) => offset + Math.sin(2 * Math.PI * cyclesASample * i + phase),
  );
  return [there.map((value, i) => (i >= 30 && i < 30 + count ? 99 : value)), there];
}

function presentBut(...missing: readonly number[]): Uint8Array {
  return Uint8Array.from({ length: RECORD }, (_, i) => (missing.includes(i) ? 0 : 1));
}

describe('a hole in a record', () => {
  it.each([
    [1, 0.01],
    [2, 0.04],
  ])('of %i samples is filled within %d of the amplitude of any sine up to a fifth of the rate', (count, bound) => {
    const missing = Array.from({ length: count }, (_, h) => 30 + h);
    for (let cycles = 0.005; cycles <= 0.2; cycles += 0.005) {
      for (let phase = 0; phase < 6.28; phase += 0.4) {
        const [x, there] = spoilt(cycles, phase, count, 9.81);
        fillHole(x, presentBut(...missing), 30, count);
        for (const i of missing) expect(Math.abs(x[i]! - there[i]!)).toBeLessThan(bound);
        expect(x[29]).toBe(there[29]);
        expect(x[30 + count]).toBe(there[30 + count]);
      }
    }
  });

  it('beside another one, or the end of the record, gets a straight line', () => {
    const x = Float64Array.from({ length: RECORD }, (_, i) => i);
    x[30] = 99;
    fillHole(x, presentBut(30, 33), 30, 1);
    expect(x[30]).toBe(30);
    const short = Float64Array.of(1, 0, 0, 4);
    fillHole(short, Uint8Array.of(1, 0, 0, 1), 1, 2);
    expect([...short]).toEqual([1, 2, 3, 4]);
  });

  it('at the very end is filled flat', () => {
    const end = Float64Array.of(1, 2, 0);
    fillStraight(end, 2, 1);
    expect([...end]).toEqual([1, 2, 2]);
    const begin = Float64Array.of(0, 2, 3);
    fillStraight(begin, 0, 1);
    expect([...begin]).toEqual([2, 2, 3]);
  });
});
