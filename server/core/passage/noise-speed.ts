import { measured, notMeasurable } from '../contract/measure.ts';
import type { Passage } from '../contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { FRAME_MICROS, type RollingNoise } from './rolling-noise.ts';

type NoiseSpeed = Pick<Passage, 'speedMs' | 'direction'>;

/** Speeds that are looked for, m/s: a shunting engine to a high-speed train. */
const SLOWEST = 3;
const FASTEST = 110;
/** Steps of slowness on each side of zero. */
const STEPS = 300;
/** The search looks at every so many frames; the refinement at all. */
const COARSE_STRIDE = 2;
/** The aligned traces must hold at least this share of the power of the single ones, beyond what chance gives. */
const SEMBLANCE_LEAST = 0.35;
/** Of several alignments about as good (a train is periodic), the fastest is taken. */
const ABOUT_AS_GOOD = 0.93;

/**
 * Speed from accelerometers alone: each wheel is loudest as it passes a sensor, so the noise of one sensor is that of
 * another, delayed. All traces of logarithmic noise power, each less the mean over the sensors (which hear the whole
 * train at once), are aligned for a slowness and stacked; the best semblance (Neidell and Taner 1971) gives the speed,
 * leaving out each sensor in turn gives its standard error.
 */
export function noiseSpeed(noise: RollingNoise, onMicros: Micros, offMicros: Micros): NoiseSpeed {
  const places = noise.channels.map(({ alongM }) => alongM);
  const spread = Math.max(...places) - Math.min(...places);
  if (new Set(places).size < 2 || spread < 3)
    return none('no axle sensors, and the deck sensors are too close together');
  const traces = tracesOf(noise, onMicros, offMicros);
  const seconds = (traces[0]!.y.length * FRAME_MICROS) / MICROS_PER_SECOND;
  if (seconds < 0.6) return none('the passage is too short for a speed from noise');
  const coarse = bestSlowness(traces, seconds);
  if (coarse === null) return none('the deck sensors do not hear the train one after the other');
  const best = nearBest(traces, coarse, seconds);
  const error = slownessError(traces, seconds, best, spread);
  const speed = 1 / Math.abs(best);
  const standardError = speed * speed * error;
  if (standardError > 0.2 * speed) return none('the deck sensors do not agree on a speed');
  return {
    speedMs: measured(speed, standardError, 'usable', 'from wheel-rail noise; no two axle sensors saw the train'),
    direction: best > 0 ? 'rising' : 'falling',
  };
}

function none(reason: string): NoiseSpeed {
  return { speedMs: notMeasurable(reason), direction: null };
}

interface Trace {
  alongM: number;
  y: Float64Array;
}

/** Logarithm of power over floor about the passage, less the mean over all sensors, each trace about its own mean. */
function tracesOf(noise: RollingNoise, onMicros: Micros, offMicros: Micros): Trace[] {
  const margin = 500_000;
  const from = Math.max(0, Math.floor((onMicros - margin - noise.startMicros) / FRAME_MICROS));
  const to = Math.min(noise.total.length, Math.ceil((offMicros + margin - noise.startMicros) / FRAME_MICROS));
  const traces = noise.channels.map(({ alongM, power, floor }) => ({
    alongM,
    y: power.slice(from, to).map((value) => Math.log(value + floor)),
  }));
  const length = to - from;
  for (let t = 0; t < length; t++) {
    let mean = 0;
    for (const { y } of traces) mean += y[t]!;
    mean /= traces.length;
    for (const { y } of traces) y[t]! -= mean;
  }
  for (const { y } of traces) {
    const mean = y.reduce((sum, value) => sum + value, 0) / length;
    for (let t = 0; t < length; t++) y[t]! -= mean;
  }
  return traces;
}

/** Signed slowness, s/m, of the best alignment; null where none stands out. */
function bestSlowness(traces: readonly Trace[], seconds: number): number | null {
  const slowest = Math.min(1 / SLOWEST, (0.4 * seconds) / spreadOf(traces));
  const fastest = 1 / FASTEST;
  if (slowest <= fastest) return null;
  const step = (slowest - fastest) / STEPS;
  const candidates: { slowness: number; score: number }[] = [];
  for (const sign of [1, -1]) {
    const scores = Array.from({ length: STEPS + 1 }, (_, k) =>
      semblance(traces, sign * (fastest + k * step), COARSE_STRIDE),
    );
    scores.forEach((score, k) => {
      const [before = -1, after = -1] = [scores[k - 1], scores[k + 1]];
      if (score < before || score < after) return;
      const bend = before - 2 * score + after;
      const shift = k > 0 && k < STEPS && bend < 0 ? (0.5 * (before - after)) / bend : 0;
      candidates.push({ slowness: sign * (fastest + (k + shift) * step), score });
    });
  }
  const top = Math.max(...candidates.map(({ score }) => score));
  if (top < SEMBLANCE_LEAST) return null;
  const good = candidates.filter(({ score }) => score >= ABOUT_AS_GOOD * top);
  return good.reduce((a, b) => (Math.abs(b.slowness) < Math.abs(a.slowness) ? b : a)).slowness;
}

/** The best alignment within a quarter of a slowness: how far one sensor more or less moves it. */
function nearBest(traces: readonly Trace[], best: number, seconds: number): number {
  const step = Math.abs(best) / 80;
  const slowest = (0.5 * seconds) / spreadOf(traces);
  let found = { slowness: best, score: -1 };
  for (let k = -20; k <= 20; k++) {
    const slowness = best + k * step;
    if (Math.abs(slowness) > slowest) continue;
    const score = semblance(traces, slowness);
    if (score > found.score) found = { slowness, score };
  }
  return found.slowness;
}

/**
 * Power of the mean of the aligned traces over the mean of their powers, 0 to 1, less 1/n, which chance gives.
 *
 * @param stride take every so many frames
 */
function semblance(traces: readonly Trace[], slowness: number, stride = 1): number {
  const n = traces.length;
  const shifts = traces.map(({ alongM }) => (alongM * slowness * MICROS_PER_SECOND) / FRAME_MICROS);
  const from = Math.ceil(-Math.min(...shifts));
  const to = traces[0]!.y.length - Math.max(...shifts) - 1;
  const frames = Math.max(0, Math.ceil((to - from) / stride));
  const stack = new Float64Array(frames);
  let single = 0;
  for (let i = 0; i < n; i++) {
    const { y } = traces[i]!;
    const whole = Math.floor(shifts[i]!);
    const part = shifts[i]! - whole;
    let at = from + whole;
    for (let k = 0; k < frames; k++, at += stride) {
      const value = (1 - part) * y[at]! + part * y[at + 1]!;
      stack[k]! += value;
      single += value * value;
    }
  }
  let stacked = 0;
  for (const sum of stack) stacked += sum * sum;
  return single === 0 ? 0 : (stacked / (n * single) - 1 / n) / (1 - 1 / n);
}

/** Most groups of sensors that are left out in turn. */
const GROUPS_MOST = 5;

/** Standard error of the slowness, s/m, by leaving out groups of sensors in turn (jackknife); part of a frame over the spread at least. */
function slownessError(traces: readonly Trace[], seconds: number, best: number, spread: number): number {
  const floor = (0.3 * FRAME_MICROS) / MICROS_PER_SECOND / spread;
  if (traces.length < 3) return 3 * floor;
  const groups = Math.min(GROUPS_MOST, traces.length);
  const others = Array.from({ length: groups }, (_, group) => traces.filter((__, i) => i % groups !== group))
    .filter((rest) => spreadOf(rest) >= 3)
    .map((rest) => nearBest(rest, best, seconds));
  if (others.length < 2) return 3 * floor;
  const n = others.length;
  const squares = others.reduce((sum, slowness) => sum + (slowness - best) ** 2, 0);
  return Math.max(floor, Math.sqrt(((n - 1) / n) * squares));
}

function spreadOf(traces: readonly Trace[]): number {
  const places = traces.map(({ alongM }) => alongM);
  return Math.max(...places) - Math.min(...places);
}
