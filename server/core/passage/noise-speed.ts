import { measured, notMeasurable } from '../contract/measure.ts';
import type { Passage } from '../contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { FRAME_MICROS, type RollingNoise } from './rolling-noise.ts';

/** Speeds that are looked for, m/s: a shunting engine to a high-speed train. */
const SLOWEST = 2;
const FASTEST = 110;
/** The noise envelopes must agree at least so well at the best delay. */
const AGREEMENT_LEAST = 0.5;

/**
 * Speed from accelerometers alone: each wheel is loudest as it passes a sensor, so the noise envelope of one sensor is
 * that of another, delayed. One straight line through place and delay over all sensors, by the mean correlation of the
 * logarithmic envelopes over a fine grid of slowness.
 */
export function noiseSpeed(
  noise: RollingNoise,
  onMicros: Micros,
  offMicros: Micros,
): Pick<Passage, 'speedMs' | 'direction'> {
  const none = (reason: string): Pick<Passage, 'speedMs' | 'direction'> => ({
    speedMs: notMeasurable(reason),
    direction: null,
  });
  const places = noise.channels.map(({ alongM }) => alongM);
  const spread = Math.max(...places) - Math.min(...places);
  if (spread < 2) return none('no axle sensors, and the deck sensors are too close together');
  const from = Math.max(0, Math.floor((onMicros - noise.startMicros) / FRAME_MICROS) - 10);
  const to = Math.min(noise.total.length, Math.ceil((offMicros - noise.startMicros) / FRAME_MICROS) + 10);
  if (to - from < 20) return none('the passage is too short for a speed from noise');
  const envelopes = noise.channels.map(({ power, floor, alongM }) => ({
    alongM,
    y: standardised(power, floor, from, to),
  }));
  let best = { score: -1, slowness: 0 };
  const steps = 400;
  const low = 1 / FASTEST;
  const high = 1 / SLOWEST;
  for (let k = -steps; k <= steps; k++) {
    if (k === 0) continue;
    const slowness = Math.sign(k) * low * (high / low) ** ((Math.abs(k) - 1) / (steps - 1));
    const score = agreement(envelopes, slowness);
    if (score > best.score) best = { score, slowness };
  }
  if (best.score < AGREEMENT_LEAST) return none('the deck sensors do not hear the train one after the other');
  const speed = 1 / Math.abs(best.slowness);
  // A frame is the resolution of a delay over the whole spread.
  const error = (speed * speed * FRAME_MICROS) / MICROS_PER_SECOND / spread / Math.sqrt(envelopes.length);
  return {
    speedMs: measured(speed, error, 'usable', 'from wheel-rail noise; no axle sensors'),
    direction: best.slowness > 0 ? 'rising' : 'falling',
  };
}

/** Logarithm of power over floor, mean 0 and mean square 1. */
function standardised(power: Float64Array, floor: number, from: number, to: number): Float64Array {
  const y = power.slice(from, to).map((value) => Math.log(1 + value / floor));
  const mean = y.reduce((sum, value) => sum + value, 0) / y.length;
  const deviation = Math.sqrt(y.reduce((sum, value) => sum + (value - mean) ** 2, 0) / y.length) || 1;
  return y.map((value) => (value - mean) / deviation);
}

/** Mean correlation of all pairs at the delays that a slowness implies, by straight lines between frames. */
function agreement(envelopes: readonly { alongM: number; y: Float64Array }[], slowness: number): number {
  let sum = 0;
  let pairs = 0;
  for (let i = 0; i < envelopes.length; i++) {
    for (let j = i + 1; j < envelopes.length; j++) {
      const a = envelopes[i]!;
      const b = envelopes[j]!;
      if (Math.abs(b.alongM - a.alongM) < 1) continue;
      const delay = ((b.alongM - a.alongM) * slowness * MICROS_PER_SECOND) / FRAME_MICROS;
      sum += correlation(a.y, b.y, delay);
      pairs += 1;
    }
  }
  return pairs === 0 ? -1 : sum / pairs;
}

function correlation(a: Float64Array, b: Float64Array, delay: number): number {
  const whole = Math.floor(delay);
  const part = delay - whole;
  let sum = 0;
  let count = 0;
  for (let i = Math.max(0, -whole); i < a.length && i + whole + 1 < b.length; i++) {
    sum += a[i]! * ((1 - part) * b[i + whole]! + part * b[i + whole + 1]!);
    count += 1;
  }
  return count < 10 ? -1 : sum / count;
}
