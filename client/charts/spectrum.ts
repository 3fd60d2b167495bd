import type { Passage } from '#core/contract/passage.ts';
import type { Micros } from '#core/contract/time.ts';
import { welch } from '#core/signal/welch.ts';
import type { SpectrumLines } from './passage-plots.ts';
import { indexAt, type Wave } from './wave.ts';

const SHORTEST = 64;
const LONGEST = 8192;

/**
 * Power spectral densities of the forced part and of the free decay, on one frequency axis: both with the longest
 * power of two of samples that fits into the shorter of them.
 *
 * @returns a part is null where it is too short or has a gap; all is null where neither is left
 */
export function spectraOf(wave: Wave, { phases }: Passage): SpectrumLines | null {
  const forced = part(wave, phases.onMicros, phases.offMicros);
  const free = part(wave, phases.offMicros, phases.freeEndMicros);
  const lengths = [forced, free].flatMap((samples) => (samples ? [samples.length] : []));
  if (lengths.length === 0) return null;
  const segment = 2 ** Math.floor(Math.log2(Math.min(LONGEST, ...lengths)));
  const density = (samples: Float64Array | null): Float64Array | null =>
    samples ? welch(samples, wave.rateHz, { segment }).psd : null;
  return { stepHz: wave.rateHz / segment, forced: density(forced), free: density(free) };
}

function part(wave: Wave, from: Micros, to: Micros): Float64Array | null {
  const samples = Float64Array.from(
    wave.samples.subarray(Math.max(0, indexAt(wave, from)), Math.max(0, indexAt(wave, to))),
  );
  return samples.length < SHORTEST || samples.some(Number.isNaN) ? null : samples;
}
