import type { Cut } from '../contract/passage.ts';
import { timeName, type Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { RULE, TICK_MICROS } from './rule.ts';
import { countAxle, standingSeconds, type AxleCount, type AxleTrack } from './standing.ts';

/**
 * Finds stretches of time that may hold a passage, one tick of all channels at a time. It only opens and closes the
 * window; whether a train was there, and when each axle came and went, is settled on the window itself (measure.ts).
 */
export interface Detector {
  floors: Record<string, Floor>;
  /** What is happening now; null in quiet times. */
  open: Candidate | null;
  /** A passage that has left and rings on. */
  ringing: Candidate | null;
  lastTick: number;
  /** First tick of the samples that have come without a pause. */
  sinceTick: number;
  /** End of the last passage: the next window does not reach back beyond it. */
  clearFrom: Micros;
  /** Pulses each axle sensor gave in earlier passages: a sensor that has spoken before is believed when it is silent. */
  proven: Record<string, boolean>;
}

/** Quiet noise power of one channel, per sample. */
interface Floor {
  power: number;
  ticks: number;
}

export interface Candidate {
  id: string;
  onsetTick: number;
  lastActiveTick: number;
  /** Longest quiet since the last pulse, ticks. */
  restTicks: number;
  /** Active ticks in a row, now and at most. */
  row: number;
  longestRow: number;
  /** A train, as far as can be told live. */
  entered: boolean;
  /** What each axle sensor has counted; no entry before its first pulse. */
  counts: Record<string, AxleCount>;
  pulseCount: number;
  freeUntilTick: number;
  /** Where samples begin shortly before, or end before the train was seen to leave. */
  cut: Cut | null;
  /** Window, once closed. */
  windowFrom: Micros;
}

export interface TickFeatures {
  number: number;
  /** Noise power per sample of each deck channel that has data. */
  powers: { sensor: string; power: number }[];
  pulses: { sensor: string; micros: Micros }[];
  /** Magnitude of the live speed, where two axle sensors have told it. */
  speedMs: number | null;
}

export type DetectorEvent =
  | { kind: 'entered' | 'left' | 'discarded'; candidate: Candidate; micros: Micros }
  | { kind: 'window'; candidate: Candidate; fromMicros: Micros; toMicros: Micros };

export function createDetector(): Detector {
  return { floors: {}, open: null, ringing: null, lastTick: -1, sinceTick: -1, clearFrom: 0, proven: {} };
}

export interface DetectorSetting {
  bridge: string;
  freeSeconds: number;
  /** The sensors at which each axle leaves a pulse, track by track. */
  axleTracks: readonly AxleTrack[];
}

/** Takes the next tick of the bridge; ticks come in rising order, with holes where there was no data at all. */
export function detect(detector: Detector, setting: DetectorSetting, tick: TickFeatures): DetectorEvent[] {
  const events: DetectorEvent[] = [];
  const skipped = detector.lastTick >= 0 && tick.number - detector.lastTick > RULE.quietSeconds * 10;
  if (skipped) events.push(...interrupt(detector, setting));
  if (skipped || detector.lastTick < 0) detector.sinceTick = tick.number;
  detector.lastTick = tick.number;
  const votes = countVotes(detector, tick);
  const active = votes || tick.pulses.length > 0;
  if (detector.open === null && active) {
    const onset = tick.pulses.reduce(
      (first, pulse) => Math.min(first, Math.floor(pulse.micros / TICK_MICROS)),
      tick.number,
    );
    detector.open = createCandidate(
      setting.bridge,
      onset,
      onset - detector.sinceTick < RULE.quietSeconds * 10 ? 'begin' : null,
    );
  }
  if (detector.open !== null) events.push(...follow(detector, setting, detector.open, tick, votes));
  if (detector.ringing !== null && tick.number >= detector.ringing.freeUntilTick) {
    events.push(...release(detector, detector.ringing.freeUntilTick * TICK_MICROS));
  }
  return events;
}

/** Time has gone back: what is open is closed, and all begins anew but for what has been learnt of the channels. */
export function turnBack(detector: Detector, setting: DetectorSetting): DetectorEvent[] {
  const events = interrupt(detector, setting);
  detector.lastTick = -1;
  detector.clearFrom = 0;
  return events;
}

/** Nothing more will come, or not for long: what is open is closed where the data end. */
export function interrupt(detector: Detector, setting: DetectorSetting): DetectorEvent[] {
  const events: DetectorEvent[] = [];
  const end = (detector.lastTick + 1) * TICK_MICROS;
  if (detector.open !== null) {
    detector.open.cut = 'end';
    events.push(...leave(detector, setting, detector.open));
  }
  if (detector.ringing !== null)
    events.push(...release(detector, Math.min(end, detector.ringing.freeUntilTick * TICK_MICROS)));
  return events;
}

function createCandidate(bridge: string, onsetTick: number, cut: Cut | null): Candidate {
  return {
    id: `${bridge}-${timeName(onsetTick * TICK_MICROS)}`,
    onsetTick,
    lastActiveTick: onsetTick,
    restTicks: 0,
    row: 0,
    longestRow: 0,
    entered: false,
    counts: {},
    pulseCount: 0,
    freeUntilTick: 0,
    cut,
    windowFrom: 0,
  };
}

/** At least two channels must agree where there are two: one failing cable is no train. Quiet channels teach their floor. */
function countVotes(detector: Detector, tick: TickFeatures): boolean {
  let votes = 0;
  const least = RULE.floorLeast * RULE.floorLeast;
  for (const { sensor, power } of tick.powers) {
    const floor = (detector.floors[sensor] ??= { power, ticks: 0 });
    if (power > RULE.activeRatio * Math.max(floor.power, least)) votes += 1;
    if (detector.open !== null) continue;
    floor.ticks = Math.min(floor.ticks + 1, 100);
    floor.power += (Math.min(power, 4 * floor.power + least) - floor.power) / floor.ticks;
  }
  return votes >= Math.min(2, Math.max(1, tick.powers.length));
}

function follow(
  detector: Detector,
  setting: DetectorSetting,
  candidate: Candidate,
  tick: TickFeatures,
  votes: boolean,
): DetectorEvent[] {
  candidate.row = votes ? candidate.row + 1 : 0;
  candidate.longestRow = Math.max(candidate.longestRow, candidate.row);
  for (const { sensor, micros } of tick.pulses) {
    candidate.counts[sensor] = countAxle(candidate.counts[sensor], micros);
    candidate.pulseCount += 1;
  }
  if (tick.pulses.length > 0) candidate.restTicks = 0;
  if (votes || tick.pulses.length > 0) candidate.lastActiveTick = tick.number;
  candidate.restTicks = Math.max(candidate.restTicks, tick.number - candidate.lastActiveTick);
  const events: DetectorEvent[] = [];
  if (!candidate.entered && looksLikeTrain(candidate, setting)) {
    candidate.entered = true;
    if (detector.ringing !== null)
      events.push(...release(detector, (candidate.onsetTick - RULE.approachTicks) * TICK_MICROS));
    candidate.windowFrom = Math.max(
      candidate.onsetTick * TICK_MICROS - RULE.beforeSeconds * MICROS_PER_SECOND,
      detector.clearFrom,
    );
    events.push({ kind: 'entered', candidate, micros: candidate.onsetTick * TICK_MICROS });
  }
  const quietSeconds = ((tick.number - candidate.lastActiveTick) * TICK_MICROS) / MICROS_PER_SECOND;
  // Axles may tell that their train has left while the approach of the next is heard; but noise that never paused is
  // another train on the bridge, whose axles no sensor saw.
  const rested = candidate.restTicks >= RULE.restTicks;
  if (rested && quietSeconds > waitSeconds(detector, setting, candidate, tick.speedMs))
    events.push(...leave(detector, setting, candidate));
  return events;
}

function looksLikeTrain(candidate: Candidate, setting: DetectorSetting): boolean {
  const speaking = Object.keys(candidate.counts).length;
  return (
    candidate.longestRow >= RULE.activeTicks ||
    // two pulses at one place are a bogie
    candidate.pulseCount >= 2 ||
    (speaking === 1 && setting.axleTracks.flatMap(({ sensors }) => sensors).length === 1)
  );
}

/** How long quiet must last before the passage counts as over: longer while an axle may be on the bridge, or the next one come. */
function waitSeconds(
  detector: Detector,
  setting: DetectorSetting,
  candidate: Candidate,
  speedMs: number | null,
): number {
  if (candidate.pulseCount === 0) return RULE.quietSeconds;
  if (!candidate.entered) return RULE.pulseWaitSeconds;
  const used = setting.axleTracks.filter(({ sensors }) =>
    sensors.some((sensor) => candidate.counts[sensor] !== undefined),
  );
  const activeMicros = candidate.lastActiveTick * TICK_MICROS;
  return Math.max(
    ...used.map((track) => standingSeconds(track, candidate.counts, detector.proven, speedMs, activeMicros)),
  );
}

/** The train has gone: a passage rings on until its free part ends; what was no train is forgotten. */
function leave(detector: Detector, setting: DetectorSetting, candidate: Candidate): DetectorEvent[] {
  detector.open = null;
  if (!candidate.entered) return [];
  for (const sensor of setting.axleTracks.flatMap(({ sensors }) => sensors)) {
    if (candidate.counts[sensor] !== undefined) detector.proven[sensor] = true;
    else if (waitedInVain(detector, candidate)) detector.proven[sensor] = false;
  }
  candidate.freeUntilTick = candidate.lastActiveTick + 1 + Math.ceil(setting.freeSeconds * 10);
  detector.ringing = candidate;
  return [{ kind: 'left', candidate, micros: (candidate.lastActiveTick + 1) * TICK_MICROS }];
}

/** A sensor that stayed silent while the bridge was held for it is believed no longer. */
function waitedInVain(detector: Detector, candidate: Candidate): boolean {
  return detector.lastTick - candidate.lastActiveTick > RULE.standUnprovenSeconds * 10;
}

function release(detector: Detector, toMicros: Micros): DetectorEvent[] {
  const candidate = detector.ringing!;
  detector.ringing = null;
  detector.clearFrom = (candidate.lastActiveTick + 1) * TICK_MICROS;
  return [{ kind: 'window', candidate, fromMicros: candidate.windowFrom, toMicros }];
}

/** From when on samples may still be needed. */
export function neededFrom(detector: Detector, nowMicros: Micros): Micros {
  let from = nowMicros - RULE.idleSeconds * MICROS_PER_SECOND;
  if (detector.ringing !== null) from = Math.min(from, detector.ringing.windowFrom);
  if (detector.open !== null) {
    from = Math.min(from, detector.open.onsetTick * TICK_MICROS - (RULE.beforeSeconds + 1) * MICROS_PER_SECOND);
  }
  return from;
}
