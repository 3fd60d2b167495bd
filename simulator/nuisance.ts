import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { ModelMode } from './model.ts';
import type { PassageEvent } from './passage.ts';

/** What shakes the deck or spoils a channel without being a train. */

/** A blow on the deck: hammer, heel-drop, dropped tool. */
export interface BlowEvent {
  kind: 'blow';
  micros: Micros;
  alongM: number;
  acrossM: number;
  /** Height and length of its half sine. A heel-drop has about 2.7 kN over 0.05 s, a sledge hammer 15 kN over 0.006 s. */
  peakKn: number;
  lengthS: number;
}

/** Gusts that shake all bending modes at random. */
export interface WindEvent {
  kind: 'wind';
  fromMicros: Micros;
  toMicros: Micros;
  /** R.m.s. acceleration that a lasting wind of this strength would keep up in the first mode, m/s². */
  rmsMs2: number;
}

/** A person walking over the deck. */
export interface WalkerEvent {
  kind: 'walker';
  fromMicros: Micros;
  fromM: number;
  toM: number;
  speedMs: number;
  stepsPerS: number;
  massKg: number;
}

/** A channel that does not say what the sensor should. */
export interface FaultEvent {
  kind: 'fault';
  sensor: string;
  fromMicros: Micros;
  toMicros: Micros;
  /**
   * flat: one value, `size` in SI. noise only: the sensor's own noise times `size`. noisy: noise that grows to `size`
   * times its usual level. spikes: `size` of them a second. drift: the offset runs away to `size` in SI.
   */
  what: 'flat' | 'noise only' | 'noisy' | 'spikes' | 'drift';
  size: number;
}

export type SceneEvent = PassageEvent | BlowEvent | WindEvent | WalkerEvent | FaultEvent;

/** Modal force over modal mass for one newton at a place of the deck, of one mode, 1/kg. */
export function pointFactor(mode: ModelMode, alongM: number, acrossM: number): number {
  const { startM, lengthM } = mode.shape;
  if (alongM <= startM || alongM >= startM + lengthM) return 0;
  return (mode.shape.at(alongM) * (mode.kind === 'bending' ? 1 : acrossM)) / mode.massKg;
}

/** Force of a blow at a time, N. */
export function blowForceN(event: BlowEvent, micros: number): number {
  const share = (micros - event.micros) / (event.lengthS * MICROS_PER_SECOND);
  return share <= 0 || share >= 1 ? 0 : 1000 * event.peakKn * Math.sin(Math.PI * share);
}

/** The high ringing of rail fastenings and plates after a blow: level beside it, its reach and its length. */
const RING = { perKn: 0.15, reachM: 4, decayS: 0.03 } as const;

/** Power of the ringing at a sensor, (m/s²)². */
export function blowPower(event: BlowEvent, micros: number, alongM: number): number {
  const since = (micros - event.micros) / MICROS_PER_SECOND;
  if (since < 0 || since > 12 * RING.decayS) return 0;
  // a short blow rings more than a soft one
  const sharpness = Math.min(1, 0.006 / event.lengthS);
  const level = RING.perKn * event.peakKn * sharpness * Math.exp(-Math.abs(alongM - event.alongM) / RING.reachM);
  return (level * Math.exp(-since / RING.decayS)) ** 2;
}

const GUST_EDGE_S = 4;

/** Strength of the wind at a moment, m/s² r.m.s.: rises and falls, with gusts of some seconds between. */
export function windRms(event: WindEvent, micros: number): number {
  const since = (micros - event.fromMicros) / MICROS_PER_SECOND;
  const left = (event.toMicros - micros) / MICROS_PER_SECOND;
  const edge = Math.min(1, since / GUST_EDGE_S, left / GUST_EDGE_S);
  if (edge <= 0) return 0;
  const gust = 1 + 0.45 * Math.sin((2 * Math.PI * since) / 7.3) + 0.3 * Math.sin((2 * Math.PI * since) / 17.9 + 1);
  return event.rmsMs2 * edge * edge * (3 - 2 * edge) * gust;
}

/** Share of the body's weight in the harmonics of a step (H. Bachmann and W. Ammann, Vibrations in Structures, 1987). */
const STEP_HARMONICS = [0.4, 0.1, 0.1] as const;

/** Place and force of a walker at a moment; null when not on the way. */
export function walkerForce(event: WalkerEvent, micros: number): { alongM: number; forceN: number } | null {
  const since = (micros - event.fromMicros) / MICROS_PER_SECOND;
  const wayM = event.toM - event.fromM;
  if (since < 0 || since * event.speedMs > Math.abs(wayM)) return null;
  const swing = STEP_HARMONICS.reduce(
    (sum, share, i) => sum + share * Math.sin(2 * Math.PI * (i + 1) * event.stepsPerS * since),
    1,
  );
  return { alongM: event.fromM + Math.sign(wayM) * event.speedMs * since, forceN: event.massKg * 9.81 * swing };
}

/** First and last moment at which an event is felt. */
export function extent(event: Exclude<SceneEvent, PassageEvent>): { fromMicros: Micros; toMicros: Micros } {
  switch (event.kind) {
    case 'blow':
      return { fromMicros: event.micros, toMicros: event.micros + Math.max(event.lengthS, 0.4) * MICROS_PER_SECOND };
    case 'walker': {
      const seconds = Math.abs(event.toM - event.fromM) / event.speedMs;
      return { fromMicros: event.fromMicros, toMicros: event.fromMicros + seconds * MICROS_PER_SECOND };
    }
    default:
      return { fromMicros: event.fromMicros, toMicros: event.toMicros };
  }
}
