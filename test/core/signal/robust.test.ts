import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { mad, median, quantile, robustDeviation } from '../../../server/core/signal/robust.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, noise } from '../../support/random.ts';
import { largestDifference, relative } from './signals.ts';

describe('robust statistics', () => {
  it('take the middle value, or the mean of the middle two', () => {
    expect(median([3, 1, 2])).toBe(2);
    expect(median([4, 1, 3, 2])).toBe(2.5);
    expect(median([7])).toBe(7);
  });

  it('interpolate quantiles and hold at the ends', () => {
    expect(quantile([4, 1, 3, 2], 0.25)).toBe(1.75);
    expect(quantile([4, 1, 3, 2], 0)).toBe(1);
    expect(quantile([4, 1, 3, 2], 1)).toBe(4);
    expect(quantile([4, 1, 3, 2], 7)).toBe(4);
    expect(quantile([4, 1, 3, 2], -7)).toBe(1);
  });

  it('say NaN where there is nothing', () => {
    expect(median([])).toBeNaN();
    expect(mad([])).toBeNaN();
  });

  it('estimate the deviation of normal noise, little moved when a third of it is replaced by rubbish', () => {
    const x = noise(createRandom(1), 20_000, 3);
    expect(relative(robustDeviation(x), 3)).toBeLessThan(0.03);
    x.fill(1e6, 0, 2000);
    expect(relative(robustDeviation(x), 3)).toBeLessThan(0.2);
  });

  it('shift and scale as they should, and leave their input in order', () => {
    const x = noise(createRandom(2), 101);
    const before = x.slice();
    expect(median(x.map((v) => 2 * v + 5))).toBeCloseTo(2 * median(x) + 5, 12);
    expect(mad(x.map((v) => -2 * v + 5))).toBeCloseTo(2 * mad(x), 12);
    expect(x).toEqual(before);
  });
});

describeChecks('robust statistics against robust.mad', () => {
  it('have the values of the table', () => {
    const Expected = Type.Object({
      data: Type.Array(Type.Number()),
      median: Type.Number(),
      mad: Type.Number(),
      sigma_hat: Type.Number(),
    });
    const { expected, tolerance } = check('robust.mad', Expected);
    expect(relative(median(expected.data), expected.median)).toBeLessThanOrEqual(tolerance.rel);
    expect(relative(mad(expected.data), expected.mad)).toBeLessThanOrEqual(tolerance.rel);
    expect(relative(robustDeviation(expected.data), expected.sigma_hat)).toBeLessThanOrEqual(tolerance.rel);
  });
});

describe.skipIf(!available('python3-scipy'))('robust statistics against SciPy', () => {
  it('agree with numpy.quantile and scipy.stats.median_abs_deviation', () => {
    const x = noise(createRandom(3), 1000);
    const script = `
from scipy import stats
x = np.array(input)
output = [*np.quantile(x, [0.05, 0.5, 0.999]), stats.median_abs_deviation(x), stats.median_abs_deviation(x, scale='normal')]
`;
    const theirs = scipy(script, x, Type.Array(Type.Number()));
    const ours = [quantile(x, 0.05), median(x), quantile(x, 0.999), mad(x), robustDeviation(x)];
    expect(largestDifference(ours, theirs)).toBeLessThan(1e-14);
  });
});
