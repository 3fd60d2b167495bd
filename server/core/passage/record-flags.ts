import { isDeckAcceleration, type Sensor } from '../contract/bridge.ts';
import { unitConversion } from '../contract/units.ts';
import { DYNAMIC_HZ } from './rule.ts';

/**
 * What is wrong with the samples of one channel of a window, as codes of sensor conditions.
 *
 * @param x calibrated samples, their offset still in them; SI
 * @param present 1 where a sample is there, 0 where it was filled in or is missing
 * @param noise r.m.s. of the quiet part, in the unit of x
 * @example flagsOf({ ...probe, range: [-20, 20] }, Float64Array.of(1, 20, 20, 20), Uint8Array.of(1, 1, 1, 1), 0) // ['clipped']
 */
export function flagsOf(sensor: Sensor, x: Float64Array, present: Uint8Array, noise: number): string[] {
  const flags: string[] = [];
  const dynamic = sensor.rateHz >= DYNAMIC_HZ;
  if (dynamic && isFlat(x, present)) flags.push('flat');
  if (isClipped(sensor, x, present)) flags.push('clipped');
  if (sensor.noiseLimit !== undefined && noise > sensor.noiseLimit) flags.push('noise high');
  if (dynamic && isDeckAcceleration(sensor) && hasSpikes(x, present)) flags.push('spike');
  return flags;
}

/** Flat when the value never moves: a stuck or unplugged converter, not a quiet one. */
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

function isClipped(sensor: Sensor, x: Float64Array, present: Uint8Array): boolean {
  if (sensor.range === undefined) return false;
  const { factor, shift } = unitConversion(sensor.unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const low = Math.fround(sensor.range[0]! * factor + shift);
  const high = Math.fround(sensor.range[1]! * factor + shift);
  let row = 0;
  for (let i = 0; i < x.length; i++) {
    const value = x[i]!;
    row = present[i] === 1 && (value <= low || value >= high) ? row + 1 : 0;
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
function hasSpikes(x: Float64Array, present: Uint8Array): boolean {
  const bend = (i: number): number => x[i]! - (x[i - 1]! + x[i + 1]!) / 2;
  const real = (i: number): boolean => present[i - 1] === 1 && present[i] === 1 && present[i + 1] === 1;
  for (let i = SPIKE_REACH + 1; i < x.length - SPIKE_REACH - 1; i++) {
    const here = Math.abs(bend(i));
    if (here < SPIKE_LEAST || !real(i) || !alone(bend(i - 1), bend(i), bend(i + 1))) continue;
    let squares = 0;
    for (let k = 3; k <= SPIKE_REACH; k++) squares += bend(i - k) ** 2 + bend(i + k) ** 2;
    if (here > SPIKE_RATIO * Math.sqrt(squares / (2 * (SPIKE_REACH - 2)))) return true;
  }
  return false;
}
