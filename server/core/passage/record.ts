import { countsAxles, isDeckAcceleration, type BridgeDefinition, type Sensor } from '../contract/bridge.ts';
import type { WindowChannel } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { fillHole, fillStraight, HOLE_MOST } from '../signal/hole.ts';
import { flagsOf } from './record-flags.ts';
import { DYNAMIC_HZ, TICK_MICROS } from './rule.ts';

/** One channel of a passage's window on one even grid of time, its offset removed: what every measure starts from. */
export interface RecordChannel {
  sensor: Sensor;
  rateHz: number;
  startMicros: Micros;
  /** SI. Holes of one or two samples are filled in; longer ones hold a straight line and are listed in `gaps`. */
  x: Float64Array;
  /** What was taken off `x`: the offset, or the mean where there is no quiet part. */
  base: number;
  deck: boolean;
  axles: boolean;
  offset: number | null;
  /** Standard error of the offset, as if samples were independent. */
  offsetError: number | null;
  noise: number | null;
  /** The quiet part is [0, quietTo). */
  quietTo: number;
  /** Where `x` stands for nothing, first to one past the last; what is missing behind the last sample among them. */
  gaps: Gap[];
  /** Samples filled in. */
  filled: number;
  flags: string[];
}

/** A range of indices without samples. */
export interface Gap {
  from: number;
  to: number;
}

/** Quiet parts shorter than this say nothing about offset and noise. */
const QUIET_SECONDS_LEAST = 0.5;
/** Kept away from the trigger, since the first noise runs ahead of the train. */
const QUIET_MARGIN_SECONDS = 0.5;

/**
 * @param channels calibrated samples of the window
 * @param triggerMicros what lies before it (less a margin) is the quiet part
 * @param toMicros end of the window
 * @param whole a person says that all of it is one event: its channels need not begin before a trigger
 */
export function arrangeRecord(
  bridge: BridgeDefinition,
  channels: readonly WindowChannel[],
  triggerMicros: Micros,
  toMicros: Micros,
  whole = false,
): RecordChannel[] {
  const arranged: RecordChannel[] = [];
  for (const channel of channels) {
    const sensor = bridge.sensors.find(({ id }) => id === channel.sensor);
    const first = channel.runs[0];
    if (sensor === undefined || first === undefined) continue;
    arranged.push(arrange(sensor, channel, first.startMicros, { triggerMicros, toMicros, whole }));
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

/** The parts of a range that hold samples, `margin` samples away from every gap. */
export function solidParts(
  channel: RecordChannel,
  from: number,
  to: number,
  margin: number,
): [from: number, to: number][] {
  const parts: [number, number][] = [];
  let begin = from;
  for (const gap of channel.gaps) {
    if (gap.from - margin > begin) parts.push([begin, Math.min(to, gap.from - margin)]);
    begin = Math.max(begin, gap.to + margin);
  }
  if (begin < to) parts.push([begin, to]);
  return parts.filter(([first, last]) => last > first && first < to);
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
  frame: { triggerMicros: Micros; toMicros: Micros; whole: boolean },
): RecordChannel {
  const { rateHz } = channel;
  const indexOf = (micros: Micros): number => ((micros - startMicros) * rateHz) / MICROS_PER_SECOND;
  const { x, present } = laidOut(channel, startMicros, Math.max(1, Math.floor(indexOf(frame.toMicros) + 1e-6) + 1));
  const quietTo = indexOf(frame.triggerMicros) - QUIET_MARGIN_SECONDS * rateHz;
  const quiet = quietPart(x, present, Math.floor(quietTo));
  const known = quiet.count >= QUIET_SECONDS_LEAST * rateHz;
  const base = known ? quiet.mean : meanOf(x, present);
  const { gaps, filled } = closeHoles(x, present);
  const flags = flagsOf(sensor, x, present, quiet.noise);
  if (rateHz >= DYNAMIC_HZ && incomplete(channel, gaps, x.length, Math.max(0, quietTo), frame)) flags.unshift('gap');
  for (let i = 0; i < x.length; i++) x[i]! -= base;
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
    quietTo: Math.max(0, Math.min(x.length, Math.floor(quietTo))),
    gaps,
    filled,
    flags,
  };
}

/**
 * A logger's clock drifts against the time it stamps, so that runs come to lie between the points of the grid. A run
 * that begins less than this many samples off follows the one before: the logger sampled on; no sample was lost.
 */
const DRIFT_SAMPLES = 0.75;

/** The runs on the grid, and where samples are. */
function laidOut(
  channel: WindowChannel,
  startMicros: Micros,
  length: number,
): { x: Float64Array; present: Uint8Array } {
  const x = new Float64Array(length);
  const present = new Uint8Array(length);
  let next = 0;
  for (const run of channel.runs) {
    const exact = ((run.startMicros - startMicros) * channel.rateHz) / MICROS_PER_SECOND;
    const at = Math.abs(exact - next) < DRIFT_SAMPLES ? next : Math.round(exact);
    const count = Math.min(run.samples.length, length - at);
    for (let i = 0; i < count; i++) {
      x[at + i] = run.samples[i]!;
      present[at + i] = 1;
    }
    next = at + run.samples.length;
  }
  return { x, present };
}

/** Fills short holes with what must have been there; longer ones with a straight line that stands for nothing. */
function closeHoles(x: Float64Array, present: Uint8Array): { gaps: Gap[]; filled: number } {
  const gaps: Gap[] = [];
  let filled = 0;
  for (let from = 0; from < x.length; from++) {
    if (present[from] === 1) continue;
    let to = from;
    while (to < x.length && present[to] !== 1) to += 1;
    const short = to - from <= HOLE_MOST && from > 0 && to < x.length;
    if (short) {
      fillHole(x, present, from, to - from);
      filled += to - from;
    } else {
      if (to < x.length) fillStraight(x, from, to - from);
      else x.fill(x[from - 1] ?? 0, from);
      gaps.push({ from, to });
    }
    from = to;
  }
  return { gaps, filled };
}

/** A recording's channels may begin and end so far apart. */
const RAGGED_SECONDS = 0.5;

/** Whether the channel misses a part of the train: a gap from shortly before the trigger on, a late start, an early end. */
function incomplete(
  channel: WindowChannel,
  gaps: readonly Gap[],
  length: number,
  doubtFrom: number,
  { triggerMicros, whole }: { triggerMicros: Micros; whole: boolean },
): boolean {
  const ragged = RAGGED_SECONDS * channel.rateHz;
  const late = channel.runs[0]!.startMicros - triggerMicros;
  return (
    late > (whole ? RAGGED_SECONDS * MICROS_PER_SECOND : TICK_MICROS) ||
    gaps.some(({ from, to }) => to > doubtFrom && (to < length || to - from > ragged))
  );
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
