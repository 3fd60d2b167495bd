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
 * @returns time of quiet; below zero where the axles have told so while something is still heard
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
  const silent = track.sensors.filter((sensor) => counts[sensor] === undefined);
  if (silent.length === 0) {
    const one = counts[track.sensors[0]!]!;
    const other = counts[track.sensors.at(-1)!]!;
    if (surplus === 0) return untilNextBogie(track, one, other, speedMs, activeMicros);
    if (surplus <= Math.max(1, Math.floor(Math.max(...axles) / 16))) return untilLastAxle(track, one, other, speedMs);
    if (rolledOff(track, one, other)) return RULE.quietSeconds;
  }
  const believed = silent.every((sensor) => proven[sensor] === true);
  return untilHidden(track, heard, believed, activeMicros);
}

/**
 * On a short bridge no axle may be on it between two bogies of one coach: the next may yet come, at the speed of the
 * last axle, or later from a train that stands astride of the bridge.
 */
function untilNextBogie(
  track: AxleTrack,
  one: AxleCount,
  other: AxleCount,
  speedMs: number | null,
  activeMicros: Micros,
): number {
  const { lastMs, braking, even } = tail(track, one, other, speedMs);
  if (lastMs === null) return RULE.quietSeconds;
  // Equal numbers that do not belong together hide an axle: no train gains speed like that.
  if (!even) {
    const leastMs = leastSpeed(one.newest.at(-1)! > other.newest.at(-1)! ? one : other) ?? lastMs;
    if (stopsWithin(leastMs, track.lengthM)) return RULE.standUnprovenSeconds;
    return Math.max(RULE.quietSeconds, track.lengthM / leastMs);
  }
  const wayM = Math.max(0, RULE.bogieDistanceM - track.lengthM);
  if (braking && stopsWithin(lastMs, wayM)) return RULE.standUnprovenSeconds;
  // What is heard now may be the approach of the next train: the axles alone tell that this one has left.
  const lastPulse = Math.max(one.newest.at(-1)!, other.newest.at(-1)!);
  return sincePulse(Math.max(RULE.emptySeconds, rollingSeconds(lastMs, wayM, braking) + 0.3), lastPulse, activeMicros);
}

/** Time after a pulse, told as time after the train was last heard. */
function sincePulse(seconds: number, pulseMicros: Micros, activeMicros: Micros): number {
  return seconds - (activeMicros - pulseMicros) / MICROS_PER_SECOND;
}

/** An axle or so is on the bridge, or its pulse was overheard: it has the length of the bridge to roll off or stop. */
function untilLastAxle(track: AxleTrack, one: AxleCount, other: AxleCount, speedMs: number | null): number {
  const wayM = Math.max(track.lengthM, RULE.bogieDistanceM - track.lengthM);
  const { lastMs, braking, axles } = tail(track, one, other, speedMs);
  if (lastMs === null) return RULE.pulseWaitSeconds;
  const steady = !braking && axles >= TAIL_AXLES;
  if (!steady && stopsWithin(lastMs, wayM)) return RULE.standUnprovenSeconds;
  return Math.max(RULE.quietSeconds, rollingSeconds(lastMs, wayM, braking) + 0.3);
}

/** One sensor is silent or has missed many: only the rhythm of the other tells the least speed at which its axles came. */
function untilHidden(track: AxleTrack, heard: readonly AxleCount[], believed: boolean, activeMicros: Micros): number {
  const busiest = heard.reduce((most, count) => (count.axles > most.axles ? count : most));
  const leastMs = leastSpeed(busiest);
  if (leastMs === null || stopsWithin(leastMs, track.lengthM)) {
    return believed ? RULE.standSeconds : RULE.standUnprovenSeconds;
  }
  const rolled = Math.max(track.lengthM, RULE.bogieDistanceM) / leastMs + 0.3;
  return Math.max(RULE.emptySeconds, sincePulse(rolled, busiest.newest.at(-1)!, activeMicros));
}

interface Tail {
  /** Least speed of the last axles that have passed both sensors, m/s; null if unknown. */
  lastMs: number | null;
  /** How many axles have passed both. */
  axles: number;
  /** Whether that is slower than the axles before them. */
  braking: boolean;
  /** Whether none of them is much faster than the one before it. */
  even: boolean;
}

const TAIL_AXLES = 3;
/** From axle to axle no train gains so much speed over a whole bridge. */
const GAIN_MOST = 1.5;

/** An axle that stood between the sensors says little of the speed; then the rhythm of the last bogies does. */
function tail(track: AxleTrack, one: AxleCount, other: AxleCount, speedMs: number | null): Tail {
  const speeds = axleSpeeds(track, one, other);
  const last = speeds.slice(-TAIL_AXLES);
  const known = last.length > 0 ? Math.min(...last) : speedMs;
  if (known === null || known === 0) return { lastMs: null, axles: 0, braking: false, even: true };
  const newer = one.newest.at(-1)! > other.newest.at(-1)! ? one : other;
  const lastMs = Math.max(known, leastSpeed(newer) ?? 0);
  const braking = lastMs < RULE.brakingShare * Math.max(speedMs ?? 0, ...speeds);
  const even = last.every((speed, i) => i === 0 || speed < GAIN_MOST * last[i - 1]!);
  return { lastMs, axles: speeds.length, braking, even };
}

/** How much the delays of the last axles may differ, as a share of the time between two of them. */
const DELAYS_ALIKE = 0.3;
/** The longest wheelbase over the shortest, with a margin. */
const WHEELBASES = 2.2;

/**
 * Whether the last four pulses of one sensor are those of the other, one way over the bridge later: then the train has
 * left, whatever was miscounted before. Their speed must fit the rhythm of the bogies, which no other axles would do.
 */
function rolledOff(track: AxleTrack, one: AxleCount, other: AxleCount): boolean {
  const [first, then] = one.newest.at(-1)! < other.newest.at(-1)! ? [one, other] : [other, one];
  const [came, left] = [first.newest.slice(-RHYTHM_PULSES), then.newest.slice(-RHYTHM_PULSES)];
  const leastMs = leastSpeed(first);
  if (leastMs === null || came.length !== left.length) return false;
  const delays = came.map((micros, i) => left[i]! - micros);
  const [shortest, longest] = [Math.min(...delays), Math.max(...delays)];
  const between = Math.min(...came.slice(1).map((micros, i) => micros - came[i]!));
  if (shortest <= 0 || longest - shortest > DELAYS_ALIKE * between) return false;
  const speed = (track.lengthM * MICROS_PER_SECOND) / longest;
  return speed > 0.9 * leastMs && speed < WHEELBASES * leastMs;
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
