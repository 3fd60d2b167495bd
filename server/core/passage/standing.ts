import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { RULE } from './rule.ts';

/**
 * Whether a train may be standing on the bridge, or astride of it, while nothing is heard: told live from the axles
 * that each sensor has counted. A train stops only where its speed lets it.
 */
export interface AxleTrack {
  sensors: readonly string[];
  /** Distance between the outermost sensors, and how many axles find room between them. */
  lengthM: number;
  room: number;
}

/** What one axle sensor has counted of the train that is passing. */
export interface AxleCount {
  axles: number;
  /** Times of the newest pulses, oldest first, at most `NEWEST`. */
  newest: Micros[];
}

/** Pulses kept of each sensor: four coaches, and the axles that find room on the bridge meanwhile. */
const NEWEST = 32;

export function countAxle(count: AxleCount | undefined, micros: Micros): AxleCount {
  return { axles: (count?.axles ?? 0) + 1, newest: [...(count?.newest ?? []), micros].slice(-NEWEST) };
}

/**
 * How long quiet must last on one track before its train counts as gone, s.
 *
 * As many axles must leave as have come; one that is missing stands on the bridge or was overheard. Where all have left
 * a bridge shorter than a coach, the next bogie may yet come. More axles than find room on the bridge cannot stand
 * there: then the other sensor is deaf.
 *
 * @param counts of the sensors that have spoken
 * @param proven sensors that are known to speak
 * @param speedMs magnitude of the live speed at the head of the train, m/s
 * @param activeMicros when the train was last heard
 */
export function standingSeconds(
  track: AxleTrack,
  counts: Readonly<Record<string, AxleCount>>,
  proven: Readonly<Record<string, boolean>>,
  speedMs: number | null,
  activeMicros: Micros,
): number {
  if (track.sensors.length < 2) return RULE.quietSeconds;
  const heard = track.sensors.flatMap((sensor) => counts[sensor] ?? []);
  const axles = track.sensors.map((sensor) => counts[sensor]?.axles ?? 0);
  const surplus = Math.max(...axles) - Math.min(...axles);
  if (surplus > track.room) return RULE.quietSeconds;
  const overheard = Math.min(...axles) > 0 && surplus <= Math.max(1, Math.floor(Math.max(...axles) / 16));
  if (overheard) {
    const one = counts[track.sensors[0]!]!;
    const other = counts[track.sensors.at(-1)!]!;
    return surplus === 0 ? untilNextBogie(track, one, other, speedMs) : untilLastAxle(track, one, other, speedMs);
  }
  const silent = track.sensors.filter((sensor) => counts[sensor] === undefined);
  return untilHidden(
    track,
    heard,
    silent.every((sensor) => proven[sensor] === true),
    activeMicros,
  );
}

/**
 * On a short bridge no axle may be on it between two bogies of one coach: the next may yet come, at the speed of the
 * last axle, or later from a train that stands astride of the bridge.
 */
function untilNextBogie(track: AxleTrack, one: AxleCount, other: AxleCount, speedMs: number | null): number {
  const wayM = RULE.bogieDistanceM - track.lengthM;
  const { lastMs, braking } = tail(track, one, other, speedMs);
  if (lastMs === null) return RULE.quietSeconds;
  if (wayM <= 0) return RULE.emptySeconds;
  if (braking && stopsWithin(lastMs, wayM)) return RULE.standUnprovenSeconds;
  return Math.max(RULE.emptySeconds, rollingSeconds(lastMs, wayM, braking) + 0.3);
}

/** An axle or so is on the bridge, or its pulse was overheard: it has the length of the bridge to roll off or stop. */
function untilLastAxle(track: AxleTrack, one: AxleCount, other: AxleCount, speedMs: number | null): number {
  const wayM = Math.max(track.lengthM, RULE.bogieDistanceM - track.lengthM);
  const { lastMs, braking } = tail(track, one, other, speedMs);
  if (lastMs === null) return RULE.pulseWaitSeconds;
  if (braking && stopsWithin(lastMs, wayM)) return RULE.standUnprovenSeconds;
  return Math.max(RULE.quietSeconds, rollingSeconds(lastMs, wayM, braking) + 0.3);
}

/** One sensor is silent or has missed many: only the rhythm of the other tells the least speed at which its axles came. */
function untilHidden(track: AxleTrack, heard: readonly AxleCount[], believed: boolean, activeMicros: Micros): number {
  const busiest = heard.reduce((most, count) => (count.axles > most.axles ? count : most));
  const leastMs = leastSpeed(busiest);
  if (leastMs === null || stopsWithin(leastMs, track.lengthM)) {
    return believed ? RULE.standSeconds : RULE.standUnprovenSeconds;
  }
  const sinceHeard = (activeMicros - busiest.newest.at(-1)!) / MICROS_PER_SECOND;
  return Math.max(RULE.quietSeconds, track.lengthM / leastMs - sinceHeard);
}

/**
 * Speed of the last axle that has passed both sensors, null if unknown; and whether it is slower than those before it.
 * An axle that stood between the sensors says little; then the rhythm of the last bogies does.
 */
function tail(
  track: AxleTrack,
  one: AxleCount,
  other: AxleCount,
  speedMs: number | null,
): { lastMs: number | null; braking: boolean } {
  const speeds = axleSpeeds(track, one, other);
  const known = speeds.at(-1) ?? speedMs;
  if (known === null || known === 0) return { lastMs: null, braking: false };
  const newer = one.newest.at(-1)! > other.newest.at(-1)! ? one : other;
  const lastMs = Math.max(known, leastSpeed(newer) ?? 0);
  return { lastMs, braking: lastMs < RULE.brakingShare * Math.max(speedMs ?? 0, ...speeds) };
}

/** Speeds of the axles that have passed both outermost sensors, by their number in the train, oldest first, m/s. */
function axleSpeeds({ lengthM }: AxleTrack, one: AxleCount, other: AxleCount): number[] {
  const speeds: number[] = [];
  const firstKept = Math.max(one.axles - one.newest.length, other.axles - other.newest.length);
  for (let axle = firstKept; axle < Math.min(one.axles, other.axles); axle++) {
    const a = one.newest[axle - one.axles + one.newest.length]!;
    const b = other.newest[axle - other.axles + other.newest.length]!;
    if (a !== b) speeds.push((lengthM * MICROS_PER_SECOND) / Math.abs(a - b));
  }
  return speeds;
}

/** No bogie is shorter than this, m (common practice). */
const SHORTEST_WHEELBASE_M = 1.8;
/** The last two bogies. */
const RHYTHM_PULSES = 4;

/**
 * No axle came slower than this, m/s: two bogies have two wheelbases between them. The second shortest interval is
 * taken, since one may come of a false pulse. Null before two bogies.
 */
function leastSpeed({ newest }: AxleCount): number | null {
  const last = newest.slice(-RHYTHM_PULSES);
  if (last.length < RHYTHM_PULSES) return null;
  const intervals = last.slice(1).map((micros, i) => micros - last[i]!);
  const second = intervals.sort((a, b) => a - b)[1]!;
  return (SHORTEST_WHEELBASE_M * MICROS_PER_SECOND) / second;
}

function stopsWithin(speedMs: number, wayM: number): boolean {
  return speedMs * speedMs < 2 * RULE.brakingMs2 * wayM;
}

/** Time over a way; twice that for a train that just does not stop at its end. */
function rollingSeconds(speedMs: number, wayM: number, braking: boolean): number {
  return ((braking ? 2 : 1) * wayM) / speedMs;
}
