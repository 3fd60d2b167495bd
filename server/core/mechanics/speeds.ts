/** Speeds at which a train meets, or misses, the natural frequency of a span. */

/**
 * Speed at which forces repeated at a spacing meet a natural frequency: v = f d / i (L. Frýba, 2001; EN 1991-2, 6.4.6.2).
 * It is felt only away from cancellation; see {@link resonanceFelt}.
 *
 * @param frequencyHz natural frequency
 * @param spacingM repeated spacing, as the length of a coach
 * @param order whole number of vibrations between two of them, from 1
 * @returns m/s
 * @example resonanceSpeed(5, 26.4, 3) // 44
 */
export function resonanceSpeed(frequencyHz: number, spacingM: number, order: number): number {
  return (frequencyHz * spacingM) / order;
}

/**
 * Speed at which a force leaves a simply supported span with its first mode at rest: v = 2 L f1 / (2k + 1)
 * (H. Xia et al., J. Eng. Mech. 2014). It does not depend on the train.
 *
 * @param order k, from 1
 * @returns m/s
 * @example cancellationSpeed(5, 20, 1) // 66.667
 */
export function cancellationSpeed(f1Hz: number, lengthM: number, order: number): number {
  return (2 * lengthM * f1Hz) / (2 * order + 1);
}

/**
 * How strongly the i-th resonance of a spacing is felt on a simply supported span, 0 … 1: the size of cos(π L i / d),
 * the factor of the free vibration that one force leaves behind at that speed. It is 0 where resonance and cancellation
 * coincide, L i / d = (2k + 1) / 2, and 1 where L i / d is whole.
 *
 * @param lengthM span
 * @param spacingM repeated spacing d
 * @param order i of v = f d / i
 * @example resonanceFelt(17.6, 26.4, 3) // 1
 */
export function resonanceFelt(lengthM: number, spacingM: number, order: number): number {
  return Math.abs(Math.cos((Math.PI * lengthM * order) / spacingM));
}
