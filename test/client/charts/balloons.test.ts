import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { spread, spreadWithin, type Wish } from '../../../client/charts/balloons.ts';

const wishes = fc.array(
  fc.record({ at: fc.double({ min: 0, max: 1000, noNaN: true }), half: fc.double({ min: 1, max: 30, noNaN: true }) }),
  { maxLength: 24 },
);
const inOrder = (all: readonly Wish[]): number[] =>
  all.map((_, i) => i).sort((a, b) => all[a]!.at - all[b]!.at || a - b);

describe('labels in a row', () => {
  it('stay where they want to be while they have room', () => {
    expect(
      spread([
        { at: 100, half: 10 },
        { at: 10, half: 10 },
      ]),
    ).toEqual([100, 10]);
  });

  it('share the shift where two want the same place', () => {
    expect(
      spread([
        { at: 10, half: 5 },
        { at: 10, half: 5 },
      ]),
    ).toEqual([5, 15]);
  });

  it('never overlap and keep their order', () => {
    fc.assert(
      fc.property(wishes, (all) => {
        const places = spread(all);
        const order = inOrder(all);
        for (let k = 1; k < order.length; k++) {
          const [a, b] = [order[k - 1]!, order[k]!];
          expect(places[b]! - places[a]!).toBeGreaterThanOrEqual(all[a]!.half + all[b]!.half - 1e-6);
        }
      }),
    );
  });

  it('are shifted as little as can be: no other allowed places have a smaller sum of squares', () => {
    const cost = (all: readonly Wish[], places: readonly number[]): number =>
      all.reduce((sum, { at }, i) => sum + (places[i]! - at) ** 2, 0);
    fc.assert(
      fc.property(
        wishes,
        fc.array(fc.double({ min: -20, max: 20, noNaN: true }), { minLength: 24, maxLength: 24 }),
        (all, nudges) => {
          const best = spread(all);
          // Any rival: nudged, then pushed apart from left to right so that it is allowed.
          const rival = [...best].map((place, i) => place + nudges[i]!);
          const order = inOrder(all);
          for (let k = 1; k < order.length; k++) {
            const [a, b] = [order[k - 1]!, order[k]!];
            rival[b] = Math.max(rival[b]!, rival[a]! + all[a]!.half + all[b]!.half);
          }
          expect(cost(all, best)).toBeLessThanOrEqual(cost(all, rival) + 1e-6);
        },
      ),
    );
  });
});

describe('labels in a room', () => {
  it('stay in it and beside each other, wherever they wish to stand, as far as there is room for all', () => {
    const anywhere = fc.array(
      fc.record({ at: fc.double({ min: -50, max: 450, noNaN: true }), half: fc.integer({ min: 2, max: 15 }) }),
      {
        minLength: 1,
        maxLength: 12,
      },
    );
    fc.assert(
      fc.property(anywhere, (given) => {
        const sorted = given.toSorted((a, b) => a.at - b.at);
        const places = spreadWithin(sorted, 400);
        let left = 0;
        places.forEach((place, i) => {
          expect(place - sorted[i]!.half).toBeGreaterThanOrEqual(left - 1e-9);
          left = place + sorted[i]!.half;
        });
        expect(left).toBeLessThanOrEqual(400 + 1e-9);
      }),
    );
  });

  it('stand where they would without its ends, where those are far', () => {
    const two = [
      { at: 100, half: 5 },
      { at: 102, half: 5 },
    ];
    expect(spreadWithin(two, 400)).toEqual(spread(two));
  });
});
