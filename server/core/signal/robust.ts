/** Median absolute deviations of a normal distribution in its standard deviation: 1 / Φ⁻¹(3/4). */
const NORMAL_MAD = 1.482602218505602;

/**
 * Value below which a share of the samples lies, by linear interpolation between order statistics (Hyndman and
 * Fan 1996, type 7; NumPy's default).
 *
 * @param x samples, not changed; no NaN
 * @param share 0 to 1
 * @returns NaN where there are no samples
 * @example quantile(Float64Array.of(4, 1, 3, 2), 0.25) // 1.75
 */
export function quantile(x: ArrayLike<number>, share: number): number {
  const n = x.length;
  if (n === 0) return NaN;
  const sorted = Float64Array.from(x).sort();
  const place = Math.min(Math.max(share, 0), 1) * (n - 1);
  const below = Math.floor(place);
  const low = sorted[below]!;
  const part = place - below;
  return part === 0 ? low : low + part * (sorted[below + 1]! - low);
}

/**
 * The middle value; the mean of the middle two where their number is even.
 *
 * @param x samples, not changed; no NaN
 * @returns NaN where there are no samples
 * @example median(Float64Array.of(5, 1, 9)) // 5
 */
export function median(x: ArrayLike<number>): number {
  return quantile(x, 0.5);
}

/**
 * Median absolute deviation from the median, in the unit of the samples. Half of the samples may be wrong without
 * moving it far.
 *
 * @param x samples, not changed; no NaN
 * @returns NaN where there are no samples
 * @example mad(Float64Array.of(5.01, 5, 5.02, 4.99, 5.01, 4.6, 5)) // 0.01
 */
export function mad(x: ArrayLike<number>): number {
  const middle = median(x);
  return median(Float64Array.from(x, (v) => Math.abs(v - middle)));
}

/**
 * Standard deviation estimated from the median absolute deviation; right for normal samples, little moved by
 * outliers.
 *
 * @param x samples, not changed; no NaN
 * @returns NaN where there are no samples
 * @example robustDeviation(Float64Array.of(5.01, 5, 5.02, 4.99, 5.01, 4.6, 5)) // 0.0148
 */
export function robustDeviation(x: ArrayLike<number>): number {
  return NORMAL_MAD * mad(x);
}
