import { BLOCK_LIMITS, type SampleBlock } from '#core/contract/block.ts';
import type { Sensor } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';

/** Makes blocks of evenly spaced samples, one sensor each, from rows of time and values. */
export interface Assembly {
  /**
   * @param micros time of the row, not rounded
   * @param values one a column
   * @param present 1 for a column that has a value in this row, else 0
   * @param resolutionMicros how finely the rows' times are written
   */
  add(micros: number, values: Float64Array, present: Uint8Array, resolutionMicros: number): void;
  /** Blocks that are full, in order of their ends; with `all`, the rest too. */
  take(all: boolean): SampleBlock[];
}

/** Length of a block, s: short enough to merge files closely, long enough to be cheap. */
const BLOCK_SECONDS = 0.5;
/** A value this far off its place, in samples, begins a new block. */
const TOLERANCE_SAMPLES = 0.75;
/** Stamps coarser than this, in samples, that do not fall on the samples' grid are smoothed over the block. */
const COARSE_SAMPLES = 0.25;
/** The rate is checked over this long, s, within these numbers of values. */
const RATE_CHECK = { seconds: 2, least: 8, most: 500, error: 0.01 } as const;

/** The run of one sensor that is being filled. */
interface Track {
  sensor: Sensor;
  periodMicros: number;
  times: Float64Array;
  samples: Float64Array;
  count: number;
  lastMicros: number;
  /** What cut stamps may be off by; 0 for stamps that can be taken one by one. */
  slackMicros: number;
  /** First steps between stamps; null once the rate is believed. */
  steps: number[] | null;
}

/**
 * Absent values, and rows out of place by three quarters of a sample, begin a new block: columns of several rates may
 * stand side by side in one table.
 *
 * @param sensors sensor of each column
 * @param where file, for complaints
 */
export function createAssembly(bridge: string, sensors: readonly Sensor[], where: string): Assembly {
  const tracks = sensors.map(createTrack);
  const done: SampleBlock[] = [];
  const close = (track: Track): void => {
    if (track.count > 0) done.push(blockOf(bridge, track));
    track.count = 0;
  };
  let resolution = NaN;
  return {
    add(micros, values, present, resolutionMicros) {
      if (resolutionMicros !== resolution) {
        resolution = resolutionMicros;
        for (const track of tracks) track.slackMicros = slackOf(track, resolution);
      }
      for (let column = 0; column < tracks.length; column++) {
        if (present[column] === 0) continue;
        const track = tracks[column]!;
        if (track.steps !== null) checkRate(track, micros, where);
        if (!continues(track, micros)) close(track);
        track.times[track.count] = micros;
        track.samples[track.count] = values[column]!;
        track.count++;
        track.lastMicros = micros;
        if (track.count === track.times.length) close(track);
      }
    },
    take(all) {
      if (all) tracks.forEach(close);
      return done.splice(0);
    },
  };
}

function createTrack(sensor: Sensor): Track {
  const length = Math.min(Math.max(1, Math.floor(sensor.rateHz * BLOCK_SECONDS)), BLOCK_LIMITS.samplesPerChannel);
  return {
    sensor,
    periodMicros: MICROS_PER_SECOND / sensor.rateHz,
    times: new Float64Array(length),
    samples: new Float64Array(length),
    count: 0,
    lastMicros: NaN,
    slackMicros: 0,
    steps: [],
  };
}

/** Stamps written to the millisecond serve 500 Hz exactly, 256 Hz not. */
function slackOf({ periodMicros }: Track, resolutionMicros: number): number {
  if (resolutionMicros <= COARSE_SAMPLES * periodMicros) return 0;
  const steps = periodMicros / resolutionMicros;
  return Math.abs(steps - Math.round(steps)) < 1e-6 ? 0 : resolutionMicros;
}

function continues(track: Track, micros: number): boolean {
  if (track.count === 0) return true;
  const off = micros - track.lastMicros - track.periodMicros;
  return Math.abs(off) <= TOLERANCE_SAMPLES * track.periodMicros + track.slackMicros;
}

function blockOf(bridge: string, track: Track): SampleBlock {
  const { sensor, samples, count, times, slackMicros } = track;
  return {
    bridge,
    logger: sensor.logger,
    sequence: null,
    startMicros: Math.round(slackMicros > 0 ? smoothedStart(track) : times[0]!),
    rateHz: sensor.rateHz,
    channels: [{ sensor: sensor.id, samples: samples.slice(0, count) }],
  };
}

/** Start of an even run through stamps that are too coarse to be taken one by one: least squares at the known slope. */
function smoothedStart({ times, count, periodMicros }: Track): number {
  const first = times[0]!;
  let sum = 0;
  for (let k = 0; k < count; k++) sum += times[k]! - first - k * periodMicros;
  return first + sum / count;
}

/** The mean step of the first values must be that of the definition: a wrong rate would make every frequency wrong. */
function checkRate(track: Track, micros: number, where: string): void {
  if (track.steps === null || Number.isNaN(track.lastMicros)) return;
  track.steps.push(micros - track.lastMicros);
  const { seconds, least, most, error } = RATE_CHECK;
  const { sensor } = track;
  if (track.steps.length < Math.min(most, Math.max(least, Math.round(sensor.rateHz * seconds)))) return;
  const sorted = track.steps.toSorted((a, b) => a - b);
  const median = sorted[sorted.length >> 1]!;
  // Gaps and steps back are no part of the rate.
  const highest = Math.max(1.5 * median, median + track.slackMicros);
  const usual = sorted.filter((step) => step >= 0 && step <= highest);
  track.steps = null;
  const foundHz = (usual.length * MICROS_PER_SECOND) / usual.reduce((sum, step) => sum + step, 0);
  if (Math.abs(foundHz / sensor.rateHz - 1) <= error) return;
  const detail = `sensor ${sensor.id}: found ${Number(foundHz.toPrecision(5))} Hz, expected ${sensor.rateHz} Hz`;
  throw new SpanbeatError({ code: 'RATE_WRONG', where, detail });
}
