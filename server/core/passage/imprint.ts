import { MICROS_PER_SECOND, sampleMicros, type Micros } from '../contract/time.ts';

/**
 * One sample of each second that was taken in, for ten minutes back: enough to tell a block that is sent again from one
 * that a stepped clock stamps with a time that has been. Plain data.
 */
export interface Imprint {
  /** By second modulo its length: which second, and the first sample in it. */
  seconds: Float64Array;
  values: Float32Array;
}

const SECONDS_KEPT = 600;

export function createImprint(): Imprint {
  return { seconds: new Float64Array(SECONDS_KEPT).fill(-1), values: new Float32Array(SECONDS_KEPT) };
}

/**
 * Remembers samples [from, to) of a block.
 *
 * @param startMicros time of sample `from`
 */
export function impress(
  imprint: Imprint,
  rateHz: number,
  startMicros: Micros,
  samples: Float32Array,
  from: number,
  to: number,
): void {
  eachSecond(rateHz, startMicros, to - from, (second, index) => {
    imprint.seconds[second % SECONDS_KEPT] = second;
    imprint.values[second % SECONDS_KEPT] = samples[from + index]!;
  });
}

/**
 * Whether a block was taken in before.
 *
 * @returns true where a remembered sample is in it, false where another was there at its time, null where nothing is
 *   remembered of its time
 */
export function isKnown(imprint: Imprint, rateHz: number, startMicros: Micros, samples: Float32Array): boolean | null {
  let known: boolean | null = null;
  eachSecond(rateHz, startMicros, samples.length, (second, index) => {
    if (imprint.seconds[second % SECONDS_KEPT] !== second) return;
    const value = imprint.values[second % SECONDS_KEPT];
    // The first sample of a second is the one beside it where the clock was corrected by a fraction of a sample.
    known ||= samples[index] === value || samples[index - 1] === value || samples[index + 1] === value;
  });
  return known;
}

/** The first sample of each whole second that begins in the block. */
function eachSecond(
  rateHz: number,
  startMicros: Micros,
  length: number,
  take: (second: number, index: number) => void,
): void {
  const endMicros = sampleMicros(startMicros, length - 1, rateHz);
  const last = Math.floor(endMicros / MICROS_PER_SECOND);
  for (let second = Math.ceil(startMicros / MICROS_PER_SECOND); second <= last; second++) {
    const index = Math.ceil(((second * MICROS_PER_SECOND - startMicros) * rateHz) / MICROS_PER_SECOND - 1e-6);
    if (index < length) take(second, index);
  }
}
