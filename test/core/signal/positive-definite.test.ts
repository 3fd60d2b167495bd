import { describe, expect, it } from 'vitest';
import { factorise, inverseOf, solveInto } from '../../../server/core/signal/positive-definite.ts';
import { forSeeds, noise, seedsFrom } from '../../support/random.ts';
import { largestDifference } from './signals.ts';

describe('positive definite systems', () => {
  it('are solved: the matrix times the solution is the right-hand side, and times the inverse is one', () => {
    forSeeds(seedsFrom(1, 20), (random) => {
      const n = random.integer(1, 9);
      const root = noise(random, n * n);
      const matrix = new Float64Array(n * n);
      for (let i = 0; i < n; i++) {
        for (let j = 0; j < n; j++) {
          let sum = i === j ? 0.1 : 0;
          for (let k = 0; k < n; k++) sum += (root[i * n + k] ?? NaN) * (root[j * n + k] ?? NaN);
          matrix[i * n + j] = sum;
        }
      }
      const factored = factorise(matrix, n);
      if (factored === null) throw new Error('not positive definite');
      const right = noise(random, n);
      const solution = right.slice();
      solveInto(factored, solution);
      const times = (column: (k: number) => number, i: number): number =>
        Array.from({ length: n }, (_, k) => (matrix[i * n + k] ?? NaN) * column(k)).reduce((a, b) => a + b, 0);
      expect(
        largestDifference(
          right.map((_, i) => times((k) => solution[k] ?? NaN, i)),
          right,
        ),
      ).toBeLessThan(1e-9);
      const inverse = inverseOf(factored);
      for (let j = 0; j < n; j++) {
        for (let i = 0; i < n; i++) expect(times((k) => inverse[k * n + j] ?? NaN, i)).toBeCloseTo(i === j ? 1 : 0, 8);
      }
    });
  });

  it('have the pivot of the example, and none where they are singular or indefinite', () => {
    expect(factorise(Float64Array.of(4, 2, 2, 3), 2)?.pivot).toBeCloseTo(Math.sqrt(2 / 3), 12);
    expect(factorise(Float64Array.of(1, 1, 1, 1), 2)).toBeNull();
    expect(factorise(Float64Array.of(1, 2, 2, 1), 2)).toBeNull();
    expect(factorise(Float64Array.of(-1), 1)).toBeNull();
    expect(factorise(Float64Array.of(0), 1)).toBeNull();
  });
});
