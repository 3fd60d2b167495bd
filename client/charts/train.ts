import type { Micros } from '#core/contract/time.ts';

/** One axle over one sensor, as the server tells it. */
export interface AxlePulse {
  passage: string | null;
  sensor: string;
  micros: Micros;
  alongM: number;
  /** Signed: positive towards rising chainage; null until a second sensor has seen the train. */
  speedMs: number | null;
}

export interface DrawnAxle {
  /** Its number in the train, from 0. */
  index: number;
  alongM: number;
}

interface Anchor {
  micros: Micros;
  alongM: number;
}

/** Pulses of one axle, in order of time, one a sensor. */
type AxleTrack = Anchor[];

/** Longest train that is followed; more axles are not drawn. */
const AXLES = 1000;
/** Silence after which pulses without a passage belong to another train. */
const NEW_TRAIN_MICROS = 8_000_000;

/**
 * The train now on the bridge, from its axle pulses: the k-th pulse of each sensor is the k-th axle. Between pulses an
 * axle runs at the estimated speed; where one that should have reached the last sensor has not, the train has slowed or
 * stopped, and all of it is held back.
 */
export class LiveTrain {
  passage: string | null = null;
  speedMs: number | null = null;
  #axles: AxleTrack[] = [];
  #counts = new Map<string, number>();
  #seen = new Set<string>();
  #lastMicros: Micros = 0;
  #left = false;

  take(pulses: readonly AxlePulse[]): void {
    for (const pulse of pulses) this.#takeOne(pulse);
  }

  /** The server says that the train has left: what has not been seen at the last sensor stands there no longer. */
  leave(passage: string): void {
    if (this.passage === null || this.passage === passage) this.#left = true;
  }

  /** The train is gone, or was none. */
  clear(): void {
    this.#left = false;
    this.passage = null;
    this.speedMs = null;
    this.#axles = [];
    this.#counts.clear();
    this.#seen.clear();
    this.#lastMicros = 0;
  }

  get axleCount(): number {
    return this.#axles.length;
  }

  get lastMicros(): Micros {
    return this.#lastMicros;
  }

  /** Where the axles are at a moment, m from the first bearing. Without a speed, only those over their sensor. */
  axlesAt(micros: Micros): DrawnAxle[] {
    const drawn: DrawnAxle[] = [];
    const overdue = this.#overdueMicros(micros);
    for (let index = 0; index < this.#axles.length; index++) {
      const track = this.#axles[index]!;
      const newest = track.findLast((pulse) => pulse.micros <= micros)?.micros ?? micros;
      const alongM = this.#placeAt(track, Math.max(newest, micros - overdue));
      if (alongM !== null) drawn.push({ index, alongM });
    }
    return drawn;
  }

  /** How long the first axle that has not reached the last sensor should have been there, beyond what messages may take. */
  #overdueMicros(micros: Micros): number {
    if (this.#left || this.speedMs === null || this.#counts.size < 2) return 0;
    const places = this.#axles.flatMap((track) => track.map(({ alongM }) => alongM));
    const exitM = this.speedMs > 0 ? Math.max(...places) : Math.min(...places);
    const first = this.#axles.find((track) => track.every(({ alongM, micros: at }) => alongM !== exitM || at > micros));
    if (first === undefined) return 0;
    const anchor = first.findLast((pulse) => pulse.micros <= micros);
    if (anchor === undefined) return 0;
    const due = anchor.micros + ((exitM - anchor.alongM) / this.speedMs) * 1e6;
    return Math.max(0, micros - due - LATE_MICROS);
  }

  #placeAt(track: AxleTrack, micros: Micros): number | null {
    let anchor = track[0]!;
    for (const next of track) if (next.micros <= micros) anchor = next;
    if (this.speedMs !== null) return anchor.alongM + this.speedMs * ((micros - anchor.micros) / 1e6);
    const sinceMicros = micros - anchor.micros;
    return sinceMicros >= 0 && sinceMicros < OVER_SENSOR_MICROS ? anchor.alongM : null;
  }

  #takeOne(pulse: AxlePulse): void {
    const other =
      pulse.passage !== null && this.passage !== null
        ? pulse.passage !== this.passage
        : pulse.micros - this.#lastMicros > NEW_TRAIN_MICROS;
    if (other && this.#lastMicros > 0) {
      if (pulse.micros < this.#lastMicros - NEW_TRAIN_MICROS) return;
      this.clear();
    }
    this.passage ??= pulse.passage;
    const name = `${pulse.sensor} ${pulse.micros}`;
    if (this.#seen.has(name)) return;
    this.#seen.add(name);
    const index = this.#counts.get(pulse.sensor) ?? 0;
    if (index >= AXLES) return;
    this.#counts.set(pulse.sensor, index + 1);
    const anchor = { micros: pulse.micros, alongM: pulse.alongM };
    const track = this.#axles[index];
    if (track) {
      track.push(anchor);
      track.sort((a, b) => a.micros - b.micros);
    } else {
      this.#axles.push([anchor]);
    }
    this.#lastMicros = Math.max(this.#lastMicros, pulse.micros);
    if (pulse.speedMs !== null) this.speedMs = pulse.speedMs;
  }
}

/** A pulse may come so late by message and by a train that slows a little. */
const LATE_MICROS = 500_000;
/** How long an axle is drawn over its sensor while its speed is unknown. */
const OVER_SENSOR_MICROS = 120_000;
