import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { trainLengthM, type Train } from './train.ts';

/** One train crossing the bridge. */
export interface PassageEvent {
  kind: 'passage';
  train: Train;
  /** When the first axle reaches the bridge: the first bearing in running direction. */
  onMicros: Micros;
  /** Speed of arrival, m/s, above 0. */
  speedMs: number;
  /** Constant acceleration from then on until the speed has changed by a third, m/s²; 0 where absent. */
  accelerationMs2?: number;
  direction: 'rising' | 'falling';
  /** Index of the track, from 0 at the smallest `across`; 0 where absent. */
  track?: number;
  stop?: Stop;
}

/** Brakes so that its first axle comes to stand at a place, stands, and starts again. */
export interface Stop {
  /** Way of the first axle past the first bearing at which it stands, m; it may be beyond the bridge's end. */
  afterM: number;
  standS: number;
  /** Deceleration and the acceleration afterwards, m/s², both positive. */
  brakingMs2: number;
  startingMs2: number;
}

/** A stretch of constant acceleration. */
interface Stretch {
  /** From when, s since the first axle reached the bridge; before the first stretch its speed is held. */
  fromS: number;
  wayM: number;
  speedMs: number;
  accelerationMs2: number;
}

/** Motion of a train: the way of its first axle past the first bearing in running direction, over time. */
export type Course = readonly Stretch[];

/** Largest change of speed by a steady acceleration, as a share of the speed of arrival. */
const LARGEST_CHANGE = 1 / 3;

export function courseOf(event: PassageEvent): Course {
  if (event.stop !== undefined) return stopping(event.speedMs, event.stop);
  const acceleration = event.accelerationMs2 ?? 0;
  const start: Stretch = { fromS: 0, wayM: 0, speedMs: event.speedMs, accelerationMs2: acceleration };
  if (acceleration === 0) return [start];
  const lastsS = (LARGEST_CHANGE * event.speedMs) / Math.abs(acceleration);
  return [start, follow(start, lastsS, 0)];
}

function stopping(speedMs: number, { afterM, standS, brakingMs2, startingMs2 }: Stop): Course {
  const brakingWayM = speedMs ** 2 / (2 * brakingMs2);
  const cruiseS = (afterM - brakingWayM) / speedMs;
  const braking: Stretch = {
    fromS: cruiseS,
    wayM: afterM - brakingWayM,
    speedMs,
    accelerationMs2: -brakingMs2,
  };
  const standing: Stretch = { fromS: cruiseS + speedMs / brakingMs2, wayM: afterM, speedMs: 0, accelerationMs2: 0 };
  const starting = follow(standing, standS, startingMs2);
  return [braking, standing, starting, follow(starting, speedMs / startingMs2, 0)];
}

function follow(before: Stretch, lastsS: number, accelerationMs2: number): Stretch {
  return {
    fromS: before.fromS + lastsS,
    wayM: before.wayM + before.speedMs * lastsS + (before.accelerationMs2 * lastsS ** 2) / 2,
    speedMs: before.speedMs + before.accelerationMs2 * lastsS,
    accelerationMs2,
  };
}

/** Way and speed at evenly spaced times, written from index 0. Times must rise. */
export function trace(course: Course, startS: number, stepS: number, wayM: Float64Array, speedMs: Float64Array): void {
  let index = 0;
  for (let j = 0; j < wayM.length; j++) {
    const t = startS + j * stepS;
    while (index + 1 < course.length && course[index + 1]!.fromS <= t) index++;
    const stretch = course[index]!;
    const since = t - stretch.fromS;
    const a = since < 0 ? 0 : stretch.accelerationMs2;
    wayM[j] = stretch.wayM + since * (stretch.speedMs + 0.5 * a * since);
    speedMs[j] = stretch.speedMs + a * since;
  }
}

/** When the first axle has made a way, s since it reached the bridge, and its speed then. */
export function arrival(course: Course, wayM: number): { seconds: number; speedMs: number } {
  let stretch = course[0]!;
  for (const next of course) if (next.wayM < wayM) stretch = next;
  const distance = wayM - stretch.wayM;
  const a = distance < 0 ? 0 : stretch.accelerationMs2;
  const speedMs = Math.sqrt(Math.max(0, stretch.speedMs ** 2 + 2 * a * distance));
  return { seconds: stretch.fromS + (2 * distance) / (stretch.speedMs + speedMs), speedMs };
}

/** When the last axle leaves a bridge of the given length. */
export function offMicros(event: PassageEvent, bridgeLengthM: number): Micros {
  const { seconds } = arrival(courseOf(event), bridgeLengthM + trainLengthM(event.train));
  return event.onMicros + Math.round(seconds * MICROS_PER_SECOND);
}

/** Speed of each axle as it passes the middle of the bridge, and their mean, m/s. */
export function speedAtMiddle(event: PassageEvent, bridgeLengthM: number): { mean: number; axles: number[] } {
  const course = courseOf(event);
  const axles = event.train.axles.map((axle) => arrival(course, bridgeLengthM / 2 + axle.behindFirstM).speedMs);
  return { mean: axles.reduce((sum, speed) => sum + speed, 0) / axles.length, axles };
}
