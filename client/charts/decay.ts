import type { Passage } from '#core/contract/passage.ts';
import { bandpass } from '#core/signal/butterworth.ts';
import { zeroPhase } from '#core/signal/zero-phase.ts';
import { filterRuns, indexAt, type Wave } from './wave.ts';

/** A free decay in the band of the first mode. */
export interface Decay {
  /** Seconds after the last axle left, with the rectified signal. */
  seconds: number[];
  rectified: number[];
  /** One point per four cycles: √2 times the r.m.s., the amplitude of a slowly decaying cosine. */
  envelope: { second: number; amplitude: number }[];
  /** The stored damping ratio through the envelope: amplitude at 0 s, its rate of fall, 1/s, and how far the line leaves a point, as a share of it. */
  fit: { amplitude: number; perSecond: number; off: number } | null;
}

const CYCLES = 4;

/**
 * The free decay of one channel around its first frequency, and the line that the stored f1 and ζ1 make of it.
 *
 * @returns null where f1 is not known, or fewer than eight cycles were recorded
 */
export function decayOf(wave: Wave, passage: Passage): Decay | null {
  const f1 = passage.f1Hz.value;
  const { offMicros, freeEndMicros } = passage.phases;
  if (f1 === null || f1 * 1.35 >= wave.rateHz / 2) return null;
  const from = Math.max(0, indexAt(wave, offMicros));
  const to = Math.min(wave.samples.length, indexAt(wave, freeEndMicros) + 1);
  const window = Math.round((CYCLES * wave.rateHz) / f1);
  if (to - from < 2 * window) return null;
  const sections = bandpass(2, f1 * 0.75, f1 * 1.35, wave.rateHz);
  const filtered = filterRuns(wave, window, (run) => zeroPhase(sections, run)).samples;

  const seconds: number[] = [];
  const rectified: number[] = [];
  for (let i = from; i < to; i++) {
    if (Number.isNaN(filtered[i]!)) return null;
    seconds.push((i - from) / wave.rateHz);
    rectified.push(Math.abs(filtered[i]!));
  }
  const envelope: Decay['envelope'] = [];
  for (let at = 0; at + window <= rectified.length; at += window >> 1) {
    let power = 0;
    for (let i = at; i < at + window; i++) power += rectified[i]! ** 2;
    envelope.push({ second: (at + window / 2) / wave.rateHz, amplitude: Math.sqrt((2 * power) / window) });
  }
  return { seconds, rectified, envelope, fit: fitOf(envelope, f1, passage.zeta1.value) };
}

/** The slope is the stored one, 2π f1 ζ1; only the height of the line is taken from the envelope. */
function fitOf(envelope: Decay['envelope'], f1: number, zeta: number | null): Decay['fit'] {
  if (zeta === null || envelope.length === 0) return null;
  const perSecond = 2 * Math.PI * f1 * zeta;
  const strongest = Math.max(...envelope.map((point) => point.amplitude));
  const clear = envelope.filter((point) => point.amplitude > strongest / 30);
  const logs = clear.map((point) => Math.log(point.amplitude) + perSecond * point.second);
  const height = logs.reduce((sum, log) => sum + log, 0) / logs.length;
  const off = Math.max(...logs.map((log) => Math.expm1(Math.abs(log - height))));
  return { amplitude: Math.exp(height), perSecond, off };
}

/** From here on the eye sees that the line leaves the points. */
const PLAINLY_OFF = 0.2;

/** Said where one damping ratio does not describe the decay; empty where it does. */
export function decayDoubt({ fit }: Decay): string {
  if (fit === null || fit.off < PLAINLY_OFF) return '';
  const percent = Math.round(100 * fit.off);
  return `the line leaves the envelope by up to ${percent} %: damping changes with amplitude here, and ζ1 is one value for all of it`;
}
