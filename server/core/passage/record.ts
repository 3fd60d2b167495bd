import { countsAxles, isDeckAcceleration, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import type { WindowChannel } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { unitConversion } from '../contract/units.ts';

/** One channel of a passage's window on one even grid of time, its offset removed: what every measure starts from. */
export interface RecordChannel {
  sensor: Sensor;
  rateHz: number;
  startMicros: Micros;
  /** SI; zero where a sample is missing. */
  x: Float64Array;
  /** What was taken off `x`: the offset, or the mean where there is no quiet part. */
  base: number;
  deck: boolean;
  axles: boolean;
  offset: number | null;
  /** Standard error of the offset, as if samples were independent. */
  offsetError: number | null;
  noise: number | null;
  /** Samples missing inside the window. */
  missing: number;
  flags: string[];
}

/** Quiet parts shorter than this say nothing about offset and noise. */
const QUIET_SECONDS_LEAST = 0.5;
/** Kept away from the trigger, since the first noise runs ahead of the train. */
const QUIET_MARGIN_SECONDS = 0.5;

/**
 * @param channels calibrated samples of the window
 * @param triggerMicros what lies before it (less a margin) is the quiet part
 * @param toMicros end of the window
 */
export function arrangeRecord(
  bridge: BridgeDefinition,
  channels: readonly WindowChannel[],
  triggerMicros: Micros,
  toMicros: Micros,
): RecordChannel[] {
  const arranged: RecordChannel[] = [];
  for (const channel of channels) {
    const sensor = bridge.sensors.find(({ id }) => id === channel.sensor);
    const first = channel.runs[0];
    if (sensor === undefined || first === undefined) continue;
    arranged.push(arrange(sensor, channel, first.startMicros, triggerMicros, toMicros));
  }
  return arranged;
}

/** Index (fractional) of a time in a channel's grid. */
export function indexAt(channel: Pick<RecordChannel, 'startMicros' | 'rateHz'>, micros: Micros): number {
  return ((micros - channel.startMicros) * channel.rateHz) / MICROS_PER_SECOND;
}

/** Time of a (fractional) index, to the microsecond. */
export function microsOf(channel: Pick<RecordChannel, 'startMicros' | 'rateHz'>, index: number): Micros {
  return channel.startMicros + Math.round((index * MICROS_PER_SECOND) / channel.rateHz);
}

/** Index range of a stretch of time, kept inside the record. */
export function rangeOf(channel: RecordChannel, fromMicros: Micros, toMicros: Micros): [from: number, to: number] {
  const clamp = (index: number): number => Math.max(0, Math.min(channel.x.length, index));
  const from = clamp(Math.ceil(indexAt(channel, fromMicros)));
  return [from, Math.max(from, clamp(Math.floor(indexAt(channel, toMicros)) + 1))];
}

/** Whether the channel's numbers may stand for the bridge. */
export function trusted(channel: RecordChannel): boolean {
  return !channel.flags.some(
    (flag) => flag === 'flat' || flag === 'spike' || flag === 'noise high' || flag === 'gap' || flag === 'clipped',
  );
}

function arrange(
  sensor: Sensor,
  channel: WindowChannel,
  startMicros: Micros,
  triggerMicros: Micros,
  toMicros: Micros,
): RecordChannel {
  const { rateHz } = channel;
  const length = Math.max(1, Math.floor(((toMicros - startMicros) * rateHz) / MICROS_PER_SECOND + 1e-6) + 1);
  const x = new Float64Array(length);
  const present = new Uint8Array(length);
  for (const run of channel.runs) {
    const at = Math.round(((run.startMicros - startMicros) * rateHz) / MICROS_PER_SECOND);
    const count = Math.min(run.samples.length, length - at);
    for (let i = 0; i < count; i++) {
      x[at + i] = run.samples[i]!;
      present[at + i] = 1;
    }
  }
  const quietTo = ((triggerMicros - startMicros) * rateHz) / MICROS_PER_SECOND - QUIET_MARGIN_SECONDS * rateHz;
  const quiet = quietPart(x, present, Math.floor(quietTo));
  const missing = missingSamples(present, rateHz);
  const flags = flagsOf(sensor, x, present, missing, quiet.noise);
  const base = quiet.count >= QUIET_SECONDS_LEAST * rateHz ? quiet.mean : meanOf(x, present);
  for (let i = 0; i < length; i++) x[i] = present[i] === 1 ? x[i]! - base : 0;
  const known = quiet.count >= QUIET_SECONDS_LEAST * rateHz;
  return {
    sensor,
    rateHz,
    startMicros,
    x,
    base,
    deck: isDeckAcceleration(sensor),
    axles: countsAxles(sensor),
    offset: known ? base : null,
    offsetError: known ? quiet.noise / Math.sqrt(quiet.count) : null,
    noise: known ? quiet.noise : null,
    missing,
    flags,
  };
}

/**
 * Samples missing between the first and the last; and those after the last, unless it is the fraction of a second by
 * which a recording ends before its window.
 */
function missingSamples(present: Uint8Array, rateHz: number): number {
  const last = present.lastIndexOf(1);
  let missing = last + 1;
  for (let i = 0; i <= last; i++) missing -= present[i]!;
  const after = present.length - 1 - last;
  return missing + (after > 0.5 * rateHz ? after : 0);
}

function quietPart(x: Float64Array, present: Uint8Array, to: number): { mean: number; noise: number; count: number } {
  let count = 0;
  let mean = 0;
  let squares = 0;
  for (let i = 0; i < Math.min(to, x.length); i++) {
    if (present[i] !== 1) continue;
    count += 1;
    const d = x[i]! - mean;
    mean += d / count;
    squares += d * (x[i]! - mean);
  }
  return { mean, noise: count > 1 ? Math.sqrt(squares / (count - 1)) : 0, count };
}

function meanOf(x: Float64Array, present: Uint8Array): number {
  let sum = 0;
  let count = 0;
  for (let i = 0; i < x.length; i++) {
    if (present[i] !== 1) continue;
    sum += x[i]!;
    count += 1;
  }
  return count === 0 ? 0 : sum / count;
}

/** Share of missing samples from which a channel counts as gappy. */
const GAP_SHARE = 0.002;

function flagsOf(sensor: Sensor, x: Float64Array, present: Uint8Array, missing: number, noise: number): string[] {
  const flags: string[] = [];
  const dynamic = sensor.rateHz >= 10;
  if (dynamic && missing > Math.max(1, GAP_SHARE * x.length)) flags.push('gap');
  if (dynamic && isFlat(x, present)) flags.push('flat');
  if (isClipped(sensor, x)) flags.push('clipped');
  if (sensor.noiseLimit !== undefined && noise > sensor.noiseLimit) flags.push('noise high');
  if (dynamic && isDeckAcceleration(sensor) && hasSpikes(x)) flags.push('spike');
  return flags;
}

/** Flat when half of all steps are exactly zero: a stuck or unplugged converter, not a quiet one. */
function isFlat(x: Float64Array, present: Uint8Array): boolean {
  let still = 0;
  let steps = 0;
  for (let i = 1; i < x.length; i++) {
    if (present[i] !== 1 || present[i - 1] !== 1) continue;
    steps += 1;
    if (x[i] === x[i - 1]) still += 1;
  }
  return steps > 0 && still === steps;
}

function isClipped(sensor: Sensor, x: Float64Array): boolean {
  if (sensor.range === undefined) return false;
  const { factor, shift } = unitConversion(sensor.unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const low = Math.fround(sensor.range[0]! * factor + shift);
  const high = Math.fround(sensor.range[1]! * factor + shift);
  let row = 0;
  for (const value of x) {
    row = value <= low || value >= high ? row + 1 : 0;
    if (row >= 3) return true;
  }
  return false;
}

/** One sample off by S bends the trace by S, and by −S/2 on either side; a step or a kink does not. */
function alone(before: number, here: number, after: number): boolean {
  const half = -here / 2;
  return Math.abs(before - half) < Math.abs(half) / 2 && Math.abs(after - half) < Math.abs(half) / 2;
}

/** A spike bends the trace this many times more than the r.m.s. bend of the samples about it, and by at least so much, m/s². */
const SPIKE_RATIO = 8;
const SPIKE_LEAST = 0.05;
/** The samples about it: from the third to this one on each side. */
const SPIKE_REACH = 20;

/**
 * A single sample that stands out from the line between its neighbours far more than any other near it: no deck does
 * that, a loose cable does. For normal noise the chance of a false one is below 1e-14 a sample.
 */
function hasSpikes(x: Float64Array): boolean {
  const bend = (i: number): number => x[i]! - (x[i - 1]! + x[i + 1]!) / 2;
  for (let i = SPIKE_REACH + 1; i < x.length - SPIKE_REACH - 1; i++) {
    const here = Math.abs(bend(i));
    if (here < SPIKE_LEAST || !alone(bend(i - 1), bend(i), bend(i + 1))) continue;
    let squares = 0;
    for (let k = 3; k <= SPIKE_REACH; k++) squares += bend(i - k) ** 2 + bend(i + k) ** 2;
    if (here > SPIKE_RATIO * Math.sqrt(squares / (2 * (SPIKE_REACH - 2)))) return true;
  }
  return false;
}
