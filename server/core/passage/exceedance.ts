import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { RULE, TICK_MICROS } from './rule.ts';

/**
 * Follows exceedances of a level in the live signal that no train explains: works on the bridge, a ship, a vehicle whose
 * wheels no sensor heard. Their wave form is wanted as much as that of a train.
 */
export interface ExceedanceWatch {
  open: OpenExceedance | null;
  /** The newest window of a passage that was measured. */
  recorded: Stretch | null;
}

interface OpenExceedance {
  fromTick: number;
  lastTick: number;
  /** It has lasted so long that its first part was recorded; the rest is not. */
  told: boolean;
}

export interface Stretch {
  fromMicros: Micros;
  toMicros: Micros;
}

/** An exceedance without a train: when the level was passed first and last, and the window about it. */
export interface Exceedance {
  above: Stretch;
  window: Stretch;
}

/** Of an exceedance that does not end, so much is recorded, s. */
const LONGEST_SECONDS = 120;
/** What rings on after it, s. */
const AFTER_SECONDS = 6;

export function createExceedanceWatch(): ExceedanceWatch {
  return { open: null, recorded: null };
}

/**
 * Takes the next tick of the bridge.
 *
 * @param above whether a level was passed in it
 * @param busy whether a train may be there, or ring off: then its own record is waited for
 * @returns an exceedance that has ended, or grown too long, and that no passage holds
 */
export function followExceedance(
  watch: ExceedanceWatch,
  number: number,
  above: boolean,
  busy: boolean,
): Exceedance | null {
  if (above) {
    watch.open ??= { fromTick: number, lastTick: number, told: false };
    watch.open.lastTick = number;
  }
  const { open } = watch;
  if (open === null || busy) return null;
  const long = (number - open.fromTick) * TICK_MICROS > LONGEST_SECONDS * MICROS_PER_SECOND;
  const over = (number - open.lastTick) * TICK_MICROS > RULE.returnSeconds * MICROS_PER_SECOND;
  if (long && !open.told) {
    open.told = true;
    return unexplained(watch, open, number);
  }
  return over ? closeExceedance(watch, number) : null;
}

/** Nothing more will come, or time goes back: what is open ends here. */
export function closeExceedance(watch: ExceedanceWatch, lastTick: number): Exceedance | null {
  const { open } = watch;
  watch.open = null;
  return open === null || open.told ? null : unexplained(watch, open, lastTick);
}

/** From when on samples may still be needed. */
export function exceedanceNeeds({ open }: ExceedanceWatch): Micros {
  return open === null || open.told ? Infinity : open.fromTick * TICK_MICROS - RULE.beforeSeconds * MICROS_PER_SECOND;
}

function unexplained({ recorded }: ExceedanceWatch, open: OpenExceedance, number: number): Exceedance | null {
  const above = { fromMicros: open.fromTick * TICK_MICROS, toMicros: (open.lastTick + 1) * TICK_MICROS };
  if (recorded !== null && recorded.toMicros > above.fromMicros && recorded.fromMicros < above.toMicros) return null;
  const after = above.toMicros + AFTER_SECONDS * MICROS_PER_SECOND;
  return {
    above,
    window: {
      fromMicros: above.fromMicros - RULE.beforeSeconds * MICROS_PER_SECOND,
      toMicros: Math.min(after, (number + 1) * TICK_MICROS),
    },
  };
}
