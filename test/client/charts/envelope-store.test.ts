import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { Frame } from '#core/contract/frame.ts';
import { EnvelopeStore } from '../../../client/charts/envelope-store.ts';

const COLUMN = 20_000;

/** Envelopes of one sensor, as [low, high] a column. */
function frame(
  sensor: string,
  startMicros: number,
  pairs: readonly (readonly [number, number])[],
  stepMicros = COLUMN,
): Frame {
  return {
    header: {
      bridge: 'sallow',
      kind: 'live',
      layout: 'envelope',
      channels: [{ sensor, startMicros, stepMicros, count: pairs.length, at: 0 }],
    },
    data: Float32Array.from(pairs.flat()),
  };
}

const traceOf = (store: EnvelopeStore, first: number, count: number): (number | null)[] => {
  const out = new Array<number | null>(2 * count).fill(99);
  store.trace('A1', first, count, out);
  return out;
};

describe('the envelope store', () => {
  it('shows a column that never came as missing, not as zero', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(frame('A1', 10 * COLUMN, [[-1, 1]]));
    expect(traceOf(store, 9, 3)).toEqual([null, null, -1, 1, null, null]);
    expect(store.extremes('A1', 9, 1)).toBeNull();
    expect(store.extremes('B', 9, 3)).toBeNull();
  });

  it('takes NaN as missing', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(
      frame('A1', 0, [
        [0, 1],
        [NaN, NaN],
        [2, 3],
      ]),
    );
    expect(traceOf(store, 0, 3)).toEqual([0, 1, null, null, 2, 3]);
  });

  it('never loses a peak: the extremes of any stretch are those of its columns', () => {
    const pairs = fc.array(
      fc.tuple(fc.float({ noNaN: true, min: -9, max: 0 }), fc.float({ noNaN: true, min: 0, max: 9 })),
      {
        minLength: 1,
        maxLength: 60,
      },
    );
    fc.assert(
      fc.property(pairs, fc.nat(1e6), (columns, start) => {
        const store = new EnvelopeStore(COLUMN, 64);
        store.take(frame('A1', start * COLUMN, columns));
        expect(store.extremes('A1', start, columns.length)).toEqual({
          low: Math.min(...columns.map(([low]) => low)),
          high: Math.max(...columns.map(([, high]) => high)),
        });
      }),
    );
  });

  it('comes to the same however the columns are cut into frames', () => {
    const columns = Array.from({ length: 40 }, (_, i) => [-(i % 7), i % 5] as const);
    const whole = new EnvelopeStore(COLUMN, 64);
    whole.take(frame('A1', 0, columns));
    for (let cut = 0; cut <= columns.length; cut++) {
      const store = new EnvelopeStore(COLUMN, 64);
      store.take(frame('A1', 0, columns.slice(0, cut)));
      store.take(frame('A1', cut * COLUMN, columns.slice(cut)));
      expect(traceOf(store, 0, 40)).toEqual(traceOf(whole, 0, 40));
    }
  });

  it('keeps the newest columns when it is full', () => {
    const store = new EnvelopeStore(COLUMN, 10);
    store.take(
      frame(
        'A1',
        0,
        Array.from({ length: 25 }, (_, i) => [i, i] as const),
      ),
    );
    expect(store.extremes('A1', 0, 15)).toBeNull();
    expect(store.extremes('A1', 15, 10)).toEqual({ low: 15, high: 24 });
  });

  it('does not let an old column overwrite a newer one in its place', () => {
    const store = new EnvelopeStore(COLUMN, 10);
    store.take(frame('A1', 12 * COLUMN, [[5, 6]]));
    store.take(frame('A1', 2 * COLUMN, [[-5, -4]]));
    expect(store.extremes('A1', 12, 1)).toEqual({ low: 5, high: 6 });
    expect(store.extremes('A1', 2, 1)).toBeNull();
  });

  it('spreads a wider column over all columns that it covers', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(
      frame(
        'A1',
        0,
        [
          [1, 2],
          [3, 4],
        ],
        4 * COLUMN,
      ),
    );
    expect(store.extremes('A1', 0, 4)).toEqual({ low: 1, high: 2 });
    expect(store.extremes('A1', 7, 1)).toEqual({ low: 3, high: 4 });
    expect(store.extremes('A1', 8, 1)).toBeNull();
  });

  it('merges narrower columns into its own', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(
      frame(
        'A1',
        0,
        [
          [-1, 0],
          [0, 2],
          [5, 5],
        ],
        COLUMN / 2,
      ),
    );
    expect(store.extremes('A1', 0, 1)).toEqual({ low: -1, high: 2 });
    expect(store.extremes('A1', 1, 1)).toEqual({ low: 5, high: 5 });
  });

  it('orders the two points of a column so that a slow wave stays a line', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(
      frame('A1', 0, [
        [0, 1],
        [1, 2],
        [1, 2],
        [0, 1],
      ]),
    );
    expect(traceOf(store, 0, 4)).toEqual([0, 1, 1, 2, 2, 1, 1, 0]);
  });

  it('leaves frames of records and of samples alone', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    const live = frame('A1', 0, [[0, 1]]);
    expect(store.take({ ...live, header: { ...live.header, kind: 'record' } })).toBe(false);
    expect(store.take({ ...live, header: { ...live.header, layout: 'samples' } })).toBe(false);
    expect(store.newestMicros).toBe(0);
  });

  it('knows the end of its newest column', () => {
    const store = new EnvelopeStore(COLUMN, 100);
    store.take(
      frame('A1', 3 * COLUMN, [
        [0, 1],
        [0, 1],
      ]),
    );
    expect(store.newestMicros).toBe(5 * COLUMN);
    store.clear();
    expect([store.newestMicros, store.sensors()]).toEqual([0, []]);
  });
});
