import { Type, type Static } from 'typebox';

/** How far a value may be used. `poor` values are shown, marked, and left out of trends. */
export const Quality = Type.Union([Type.Literal('good'), Type.Literal('usable'), Type.Literal('poor')]);
export type Quality = Static<typeof Quality>;

/**
 * A measured value: a number with its standard error, or the reason why there is none.
 * "Not measurable" is a value too: never a zero, never a missing row.
 */
export const Measured = Type.Union([
  Type.Object({
    value: Type.Number(),
    /** Standard error in the unit of the value; null where none can be given honestly. */
    standardError: Type.Union([Type.Number(), Type.Null()]),
    quality: Quality,
    /** Why the quality is less than good; absent when it is good. */
    reason: Type.Optional(Type.String()),
  }),
  Type.Object({ value: Type.Null(), reason: Type.String() }),
]);
export type Measured = Static<typeof Measured>;

/** How the reason of a peak begins that may have been larger where nothing was recorded. */
export const LOWER_BOUND = 'lower bound';

/** Whether a value is but a lower bound of what it measures. */
export function isLowerBound(measure: Measured): boolean {
  return measure.reason?.startsWith(LOWER_BOUND) === true && measure.value !== null;
}

/** A value with its standard error; a reason makes it usable or poor. */
export function measured(
  value: number,
  standardError: number | null,
  quality: Quality = 'good',
  reason?: string,
): Measured {
  return reason === undefined ? { value, standardError, quality } : { value, standardError, quality, reason };
}

/** The honest answer when a value cannot be had. */
export function notMeasurable(reason: string): Measured {
  return { value: null, reason };
}
