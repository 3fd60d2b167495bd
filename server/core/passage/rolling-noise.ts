import { spanAt, type BridgeDefinition } from '../contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { highpass } from '../signal/butterworth.ts';
import { zeroPhase } from '../signal/zero-phase.ts';
import { quantile } from '../signal/robust.ts';
import { trusted, type RecordChannel } from './record.ts';
import { RULE } from './rule.ts';

/**
 * Wheel-rail noise over a passage: power above the first modes in frames of `FRAME_MICROS`, summed over the deck
 * channels, each against its own quiet floor. It begins with the first axle on the deck and ends with the last, while
 * the modes ring on.
 */
export interface RollingNoise {
  startMicros: Micros;
  /** Sum over channels of (power / floor), per frame. */
  total: Float64Array;
  /** Whether the band begins above the modes that ring on; a slow channel has no such band. */
  clear: boolean;
  /** Power of each channel per frame, (m/s²)². */
  channels: { alongM: number; power: Float64Array; floor: number }[];
}

export const FRAME_MICROS = 10_000;

export function rollingNoise(
  bridge: BridgeDefinition,
  record: readonly RecordChannel[],
  triggerMicros: Micros,
): RollingNoise | null {
  const deck = record.filter((channel) => channel.deck && channel.x.length > channel.rateHz);
  const good = deck.filter(trusted);
  const used = good.length > 0 ? good : deck.filter((channel) => !channel.flags.includes('flat'));
  const first = used[0];
  if (first === undefined) return null;
  const startMicros = Math.max(...used.map((channel) => channel.startMicros));
  const frames = Math.min(
    ...used.map((channel) =>
      Math.floor(
        ((channel.x.length / channel.rateHz) * MICROS_PER_SECOND - (startMicros - channel.startMicros)) / FRAME_MICROS,
      ),
    ),
  );
  if (frames < 10) return null;
  const quietFrames = Math.floor((triggerMicros - startMicros) / FRAME_MICROS) - 50;
  const channels = used.map((channel) => {
    const power = framePower(bridge, channel, startMicros, frames);
    const quiet = power.subarray(0, Math.max(0, quietFrames));
    const least = RULE.floorLeast * RULE.floorLeast;
    const floor = Math.max(quiet.length >= 20 ? quantile(quiet, 0.5) : quantile(power, 0.05), least);
    return { alongM: channel.sensor.alongM, power: medianOfFive(power), floor };
  });
  const total = new Float64Array(frames);
  for (const { power, floor } of channels) for (let i = 0; i < frames; i++) total[i]! += power[i]! / floor;
  for (let i = 0; i < frames; i++) total[i]! /= channels.length;
  const clear = used.every((channel) => wantedEdge(bridge, channel) <= highestEdge(channel));
  return { startMicros, total, clear, channels };
}

/** Above the third bending mode, which rings on after the last axle, Hz. */
function wantedEdge(bridge: BridgeDefinition, { sensor }: RecordChannel): number {
  return RULE.phaseNoiseOverF1 * (spanAt(bridge, sensor.alongM).frequenciesHz?.f1 ?? 0);
}

const highestEdge = ({ rateHz }: RecordChannel): number => 0.3 * rateHz;

function framePower(
  bridge: BridgeDefinition,
  channel: RecordChannel,
  startMicros: Micros,
  frames: number,
): Float64Array {
  const edge = Math.min(Math.max(RULE.phaseNoiseFromHz, wantedEdge(bridge, channel)), highestEdge(channel));
  const y = zeroPhase(highpass(RULE.noiseOrder / 2, edge, channel.rateHz), channel.x);
  const power = new Float64Array(frames);
  const perFrame = (channel.rateHz * FRAME_MICROS) / MICROS_PER_SECOND;
  const offset = ((startMicros - channel.startMicros) * channel.rateHz) / MICROS_PER_SECOND;
  for (let f = 0; f < frames; f++) {
    const from = Math.max(0, Math.floor(offset + f * perFrame));
    const to = Math.min(y.length, Math.max(from + 1, Math.floor(offset + (f + 1) * perFrame)));
    let sum = 0;
    for (let i = from; i < to; i++) sum += y[i]! * y[i]!;
    power[f] = sum / Math.max(1, to - from);
  }
  return power;
}

export interface NoiseSpan {
  /** As in `RollingNoise`. */
  clear: boolean;
  onMicros: Micros;
  offMicros: Micros;
  /** Longest time without a break in which noise was near its level, s. */
  sustainedSeconds: number;
  /** All time in which it was, s. */
  loudSeconds: number;
  /** By how much noise fell from the first third of that time to the last, power ratio: a blow rings off, a train rolls. */
  fall: number;
  /** Level over the quiet floor, power ratio. */
  ratio: number;
}

/** Level of a rolling train: this quantile of the frames above the floor. */
const LEVEL_QUANTILE = 0.6;
/** The edges are first looked for at this share of the level: the quieter of two trains is still above it, most of an approach below. */
const DECK_SHARE = 0.04;
const SUSTAIN_SHARE = 0.1;
const SUSTAIN_QUANTILE = 0.9;

/** Where the noise says that axles were on the deck; null where nothing rises above the floor. */
export function noiseSpan(noise: RollingNoise): NoiseSpan | null {
  const smooth = smoothed(noise.total, 2);
  const above = smooth.filter((value) => value > RULE.activeRatio);
  if (above.length < 6) return null;
  const level = quantile(above, LEVEL_QUANTILE);
  const deck = Math.max(DECK_SHARE * level, RULE.activeRatio / 2);
  const [first, last] = mainStretch(smooth, deck, level);
  if (last <= first) return null;
  const on = stepNear(noise.total, first);
  const off = noise.total.length - stepNear(noise.total.toReversed(), noise.total.length - 1 - last);
  return {
    clear: noise.clear,
    onMicros: noise.startMicros + on * FRAME_MICROS,
    offMicros: noise.startMicros + Math.max(off, on + 1) * FRAME_MICROS,
    ...sustained(smoothed(noise.total, 3).subarray(first, last + 1)),
    ratio: level,
  };
}

/** Quiet that parts the passage from a neighbour's approach in the same window, frames. */
const APART = 100;

/**
 * First and last frame above a level, of the stretch (holding together over quiet of less than a second) with most
 * power; power above `most` counts as `most`, since a blow in the free part is loud but short.
 */
function mainStretch(smooth: Float64Array, level: number, most: number): [first: number, last: number] {
  let best: [number, number] = [0, 0];
  let greatest = 0;
  let first = -1;
  let last = -1;
  let power = 0;
  for (let i = 0; i <= smooth.length; i++) {
    const ended = first >= 0 && (i === smooth.length || i - last > APART);
    if (ended && power > greatest) {
      greatest = power;
      best = [first, last];
    }
    if (ended) first = -1;
    if (i === smooth.length || smooth[i]! <= level) continue;
    if (first < 0) {
      first = i;
      power = 0;
    }
    last = i;
    power += Math.min(smooth[i]!, most);
  }
  return best;
}

/** Longest time without a break near the level of the loud frames; one blow in the middle of a train is not that level. */
function sustained(smooth: Float64Array): Pick<NoiseSpan, 'sustainedSeconds' | 'loudSeconds' | 'fall'> {
  const loud = smooth.filter((value) => value > RULE.activeRatio);
  const level = loud.length === 0 ? 0 : quantile(loud, SUSTAIN_QUANTILE);
  const least = Math.max(SUSTAIN_SHARE * level, RULE.activeRatio / 2);
  let longest = 0;
  let end = 0;
  let row = 0;
  let count = 0;
  smooth.forEach((value, i) => {
    row = value > least ? row + 1 : 0;
    if (row > 0) count += 1;
    if (row <= longest) return;
    longest = row;
    end = i + 1;
  });
  const third = Math.floor(longest / 3);
  const start = end - longest;
  const fall = third === 0 ? 1 : mean(smooth, start, start + third) / mean(smooth, end - third, end);
  const seconds = (frames: number): number => (frames * FRAME_MICROS) / MICROS_PER_SECOND;
  return { sustainedSeconds: seconds(longest), loudSeconds: seconds(count), fall };
}

/** Frames before and after a first crossing in which the step itself is looked for. */
const STEP_BEFORE = 60;
const STEP_AFTER = 15;

/**
 * Frame at which the noise steps up as the first axle comes onto the deck: the split into two parts that makes their
 * logarithms most alike (the picker of Maeda 1985, Akaike's criterion, on logarithmic power).
 */
function stepNear(total: Float64Array, crossing: number): number {
  const from = Math.max(0, crossing - STEP_BEFORE);
  const to = Math.min(total.length, crossing + STEP_AFTER);
  const y = Float64Array.from(total.subarray(from, to), (value) => Math.log(value + 0.1));
  const n = y.length;
  let best = { at: crossing, score: Infinity };
  for (let k = 5; k <= n - 5; k++) {
    const score = k * Math.log(variance(y, 0, k)) + (n - k - 1) * Math.log(variance(y, k, n));
    if (score < best.score) best = { at: from + k, score };
  }
  return best.at;
}

/** A spike of one cable fills a frame or two; a running median of five leaves steps where they are and spikes out. */
function medianOfFive(x: Float64Array): Float64Array {
  const { min, max } = Math;
  const at = (i: number): number => x[max(0, min(x.length - 1, i))]!;
  return x.map((c, i) => {
    const [a, b, d, e] = [at(i - 2), at(i - 1), at(i + 1), at(i + 2)];
    const low = max(min(a, b), min(d, e));
    const high = min(max(a, b), max(d, e));
    return max(min(low, high), min(max(low, high), c));
  });
}

function mean(y: Float64Array, from: number, to: number): number {
  let sum = 0;
  for (let i = from; i < to; i++) sum += y[i]!;
  return sum / (to - from);
}

function variance(y: Float64Array, from: number, to: number): number {
  const middle = mean(y, from, to);
  let squares = 0;
  for (let i = from; i < to; i++) squares += (y[i]! - middle) ** 2;
  return squares / (to - from) + 1e-6;
}

/** Mean over `reach` frames on each side. */
function smoothed(x: Float64Array, reach: number): Float64Array {
  return x.map((_, i) => {
    let sum = 0;
    let count = 0;
    for (let k = Math.max(0, i - reach); k <= Math.min(x.length - 1, i + reach); k++) {
      sum += x[k]!;
      count += 1;
    }
    return sum / count;
  });
}
