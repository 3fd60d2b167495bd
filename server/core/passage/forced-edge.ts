import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { lowpass } from '../signal/butterworth.ts';
import { factorise, solveInto } from '../signal/positive-definite.ts';
import { median } from '../signal/robust.ts';
import { zeroPhase } from '../signal/zero-phase.ts';
import { indexAt, rangeOf, type RecordChannel } from './record.ts';

/**
 * Where a bridge begins or ceases to be driven, span by span: the last axle drives the last span alone. A deck that
 * nobody drives moves by its own law: each sample follows from those beside it by one linear recurrence, the same for
 * all channels (the modes' poles). The recurrence is fitted where the deck is free and carried towards the train; from
 * the first sample that does not obey it on, an axle is on the bridge. An axle of a tenth of the deck's mass, 50 ms from
 * a bearing, already shows as tenths of m/s².
 */
export interface FreeStretch {
  /** Where the deck is known to be free, next to the edge. */
  fromMicros: Micros;
  toMicros: Micros;
}

/** Band and sample rate of the motion that is looked at: above the first modes, below wheel-rail noise. */
const BAND_HZ = 20;
const RATE_HZ = 100;
/** Samples beside the stretch in which the filter settles. */
const SETTLE_MICROS = MICROS_PER_SECOND;
/** Order of the recurrence: two for each mode in the band and some for noise. */
const ORDER = 16;
/** The free stretch must hold this much, s. */
const FREE_SECONDS_LEAST = 0.8;
/** The residual is told from noise by this ratio of mean squares over `HOLD` samples. */
const RATIO = 16;
const HOLD = 4;
const ROUNDS_MOST = 8;
/** How plainly the deck is driven beyond an edge is the mean of that ratio over so many samples. */
const BEYOND = 30;
/**
 * Share of the motion by which a deck may depart from one linear law and still be free: ballast is softer at larger
 * amplitude, some tenths of a percent of frequency per m/s².
 */
const SOFTENING = 0.003;

export interface Edge {
  micros: Micros;
  /** Mean square of what the deck does against its law beyond the edge, over that of noise. */
  strength: number;
}

/** Last time, searching from the free stretch back to `untilMicros`, at which the deck was driven; null if it cannot be told. */
export function lastDriven(spans: readonly RecordChannel[][], free: FreeStretch, untilMicros: Micros): Edge | null {
  const fitted = Math.floor(((free.toMicros - free.fromMicros) * RATE_HZ) / MICROS_PER_SECOND);
  const edges = spans.flatMap((deck) => {
    const traces = tracesOf(deck, untilMicros, free.toMicros);
    if (traces === null) return [];
    const reversed = traces.map((trace) => trace.toReversed());
    const found = firstDisobedient(reversed, fitted, SOFTENING);
    if (found === null) return [];
    return [{ micros: untilMicros + sampleTime(reversed[0]!.length - 1 - found.at), strength: found.strength }];
  });
  return edges.reduce<Edge | null>((last, edge) => (last === null || edge.micros > last.micros ? edge : last), null);
}

/** First time, searching from the free stretch on to `untilMicros`, at which the deck is driven. */
export function firstDriven(spans: readonly RecordChannel[][], free: FreeStretch, untilMicros: Micros): Edge | null {
  const fitted = Math.floor(((free.toMicros - free.fromMicros) * RATE_HZ) / MICROS_PER_SECOND);
  const edges = spans.flatMap((deck) => {
    const traces = tracesOf(deck, free.fromMicros, untilMicros);
    const found = traces === null ? null : firstDisobedient(traces, fitted, 0);
    return found === null ? [] : [{ micros: free.fromMicros + sampleTime(found.at), strength: found.strength }];
  });
  return edges.reduce<Edge | null>(
    (first, edge) => (first === null || edge.micros < first.micros ? edge : first),
    null,
  );
}

function sampleTime(index: number): Micros {
  return Math.round((index * MICROS_PER_SECOND) / RATE_HZ);
}

/** Low-passed traces on one grid of RATE_HZ between two times, by straight lines between samples. */
function tracesOf(deck: readonly RecordChannel[], fromMicros: Micros, toMicros: Micros): Float64Array[] | null {
  const length = Math.floor(((toMicros - fromMicros) * RATE_HZ) / MICROS_PER_SECOND);
  const fast = deck.filter(({ rateHz }) => rateHz >= 2 * RATE_HZ);
  if (length < (FREE_SECONDS_LEAST * RATE_HZ) / 2) return null;
  const traces = fast.flatMap((channel) => {
    const [from, to] = rangeOf(channel, fromMicros - SETTLE_MICROS, toMicros + SETTLE_MICROS);
    if (to - from < 2) return [];
    const smooth = zeroPhase(lowpass(4, BAND_HZ, channel.rateHz), channel.x.subarray(from, to));
    return Float64Array.from({ length }, (_, i) => {
      const place = Math.max(0, indexAt(channel, fromMicros + (i * MICROS_PER_SECOND) / RATE_HZ) - from);
      const whole = Math.min(Math.floor(place), smooth.length - 2);
      const part = Math.min(1, place - whole);
      return (1 - part) * smooth[whole]! + part * smooth[whole + 1]!;
    });
  });
  return traces.length === 0 ? null : traces;
}

/**
 * Index from which on the traces do not follow the recurrence fitted before it. What was found too early by a mode that
 * had died away in the stretch first fitted is learnt by fitting again up to there, until nothing moves. `slack` is the
 * share of the motion that may depart from the law.
 */
function firstDisobedient(x: readonly Float64Array[], free: number, slack: number): Disobedience | null {
  if (free < FREE_SECONDS_LEAST * RATE_HZ) return null;
  let found: Disobedience | null = null;
  let fitted = free;
  for (let round = 0; round < ROUNDS_MOST; round++) {
    const next = search(x, fitted, slack);
    if (next === null || (found !== null && next.at <= found.at + 1)) return next ?? found;
    found = next;
    fitted = next.at - 2;
  }
  return found;
}

interface Disobedience {
  at: number;
  strength: number;
}

function search(x: readonly Float64Array[], fitted: number, slack: number): Disobedience | null {
  const weights = recurrence(x, fitted);
  if (weights === null) return null;
  const residuals = x.map((trace) => residualOf(trace, weights));
  const floors = residuals.map((r) => robustMeanSquare(r.subarray(ORDER, fitted)));
  const length = x[0]!.length;
  const ratioAt = (i: number): number => {
    let ratio = 0;
    residuals.forEach((r, c) => {
      const motion = meanSquare(x[c]!, i - ORDER, i);
      ratio += r[i]! ** 2 / (floors[c]! + slack * slack * motion + 1e-12);
    });
    return ratio / x.length;
  };
  let held = 0;
  for (let i = fitted; i < length; i++) {
    held = ratioAt(i) > RATIO ? held + 1 : 0;
    if (held < HOLD) continue;
    const at = i - HOLD + 1;
    const to = Math.min(length, at + BEYOND);
    let sum = 0;
    for (let k = at; k < to; k++) sum += ratioAt(k);
    return { at, strength: sum / (to - at) };
  }
  return null;
}

/** Mean square of normal noise from the median of its squares, 0.4549 times it: a few outliers do not matter. */
function robustMeanSquare(x: Float64Array): number {
  return median(x.map((value) => value * value)) / 0.4549;
}

/** Least squares over all channels, each with its own scale: x[i] = Σ w[k] x[i − 1 − k]. */
function recurrence(x: readonly Float64Array[], fitted: number): Float64Array | null {
  const normal = new Float64Array(ORDER * ORDER);
  const right = new Float64Array(ORDER);
  for (const trace of x) addNormal(normal, right, trace, fitted, 1 / (meanSquare(trace, 0, fitted) + 1e-12));
  // A faint ridge keeps a noiseless record, whose recurrence is shorter, solvable.
  for (let a = 0; a < ORDER; a++) normal[a * ORDER + a]! *= 1 + 1e-6;
  const factored = factorise(normal, ORDER);
  if (factored === null) return null;
  solveInto(factored, right);
  return right;
}

/**
 * Adds the products of a trace with its own past over [ORDER, fitted). Along a diagonal the sum moves by one sample at
 * each step, so that only the first column is summed in full (Makhoul 1975, the covariance method).
 */
function addNormal(
  normal: Float64Array,
  right: Float64Array,
  trace: Float64Array,
  fitted: number,
  scale: number,
): void {
  const lag = (a: number, b: number, i: number): number => trace[i - 1 - a]! * trace[i - 1 - b]!;
  for (let first = 0; first < ORDER; first++) {
    let toNow = 0;
    let sum = 0;
    for (let i = ORDER; i < fitted; i++) {
      toNow += trace[i]! * trace[i - 1 - first]!;
      sum += trace[i - 1]! * trace[i - 1 - first]!;
    }
    right[first]! += scale * toNow;
    for (let a = first, b = 0; a < ORDER; a++, b++) {
      if (b > 0) sum += lag(a, b, ORDER) - lag(a, b, fitted);
      normal[a * ORDER + b]! += scale * sum;
    }
  }
}

function residualOf(trace: Float64Array, weights: Float64Array): Float64Array {
  return trace.map((value, i) => {
    if (i < ORDER) return 0;
    let predicted = 0;
    for (let k = 0; k < ORDER; k++) predicted += weights[k]! * trace[i - 1 - k]!;
    return value - predicted;
  });
}

function meanSquare(x: Float64Array, from: number, to: number): number {
  let sum = 0;
  for (let i = from; i < to; i++) sum += x[i]! * x[i]!;
  return sum / Math.max(1, to - from);
}
