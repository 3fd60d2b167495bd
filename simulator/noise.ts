import { bridgeLengthM, type BridgeDefinition, type Sensor } from '#core/contract/bridge.ts';
import type { WheelRail } from './parameters.ts';
import type { PassageEvent } from './passage.ts';
import { trainLengthM } from './train.ts';
import type { RandomStream } from './random.ts';

/**
 * Wheel–rail noise as a deck sensor hears it: broad band, stronger with speed, load and rough wheels, strongest while
 * an axle is beside the sensor, weak but audible while it is still on the ground before or behind the bridge.
 */

/** Level over the places of an axle, as power relative to an axle beside the sensor. */
export interface NoiseKernel {
  /** Place of entry 0, m from the first bearing; entries are GRID_M apart. */
  fromM: number;
  power: Float32Array;
}

const GRID_M = 0.1;
/** How far from the bridge an axle is heard at all, m. */
export const HEARD_M = 60;
/** Reach of the direct sound near the sensor and of the deck's own, m; share of the deck's own. */
const NEAR_M = 3;
const DECK_M = 25;
const DECK_SHARE = 0.3;
/** Decay along the rails outside the bridge, m. */
const RAIL_M = 12;
/** Speed and axle load at which the level holds. */
const LEVEL_SPEED_MS = 44.4;
const LEVEL_LOAD_KN = 112;

const MOUNT_GAIN: Readonly<Record<Sensor['mount'], number>> = {
  deck: 1,
  girder: 0.8,
  bearing: 0.5,
  rail: 8,
  ballast: 1.3,
  air: 0,
};

export function noiseKernel(definition: BridgeDefinition, sensor: Sensor, wheelRail: WheelRail): NoiseKernel {
  const lengthM = bridgeLengthM(definition);
  const gain = sensor.quantity === 'acceleration' ? wheelRail.levelMs2 * MOUNT_GAIN[sensor.mount] : 0;
  const drop = 10 ** (-wheelRail.approachDb / 20);
  const onBridge = (alongM: number): number => {
    const distance = Math.abs(alongM - sensor.alongM);
    return (1 - DECK_SHARE) * Math.exp(-distance / NEAR_M) + DECK_SHARE * Math.exp(-distance / DECK_M);
  };
  const fromM = -HEARD_M;
  const power = Float32Array.from({ length: Math.ceil((lengthM + 2 * HEARD_M) / GRID_M) + 1 }, (_, i) => {
    const alongM = fromM + i * GRID_M;
    const outside = Math.max(-alongM, alongM - lengthM, 0);
    const end = Math.min(Math.max(alongM, 0), lengthM);
    const level = outside > 0 ? drop * onBridge(end) * Math.exp(-outside / RAIL_M) : onBridge(end);
    return (gain * level) ** 2;
  });
  return { fromM, power };
}

/** Power at a sensor over the way of the train's first axle past the first bearing, at LEVEL_SPEED_MS. */
export interface NoiseMap {
  fromM: number;
  power: Float32Array;
}

/** All axles of a train added up for one sensor. */
export function noiseMap(kernel: NoiseKernel, event: PassageEvent, bridgeLengthM: number): NoiseMap {
  const { axles } = event.train;
  const count = Math.ceil((bridgeLengthM + 2 * HEARD_M + trainLengthM(event.train)) / GRID_M) + 1;
  const power = new Float32Array(count);
  // a falling train meets the kernel from its other end
  const ordered = event.direction === 'rising' ? kernel.power : kernel.power.toReversed();
  for (const axle of axles) {
    const weight = (axle.roughness ** 2 * axle.loadKn) / LEVEL_LOAD_KN;
    const offset = Math.round(axle.behindFirstM / GRID_M);
    const end = Math.min(ordered.length, count - offset);
    for (let i = 0; i < end; i++) power[i + offset] = power[i + offset]! + weight * ordered[i]!;
  }
  return { fromM: -HEARD_M, power };
}

/** Power of the noise of a train whose first axle has made a way, (m/s²)². */
export function noisePower(map: NoiseMap, wayM: number, speedMs: number): number {
  const index = Math.round((wayM - map.fromM) / GRID_M);
  if (index < 0 || index >= map.power.length) return 0;
  return map.power[index]! * (speedMs / LEVEL_SPEED_MS) ** 2;
}

/** Band of the noise, Hz; the upper edge gives way to the anti-alias filter of a slow channel. */
const BAND_HZ = [20, 200] as const;
export const ANTI_ALIAS = 0.4;

/** White noise brought into the band of wheel and rail; unit power over the whole band. */
export class NoiseShaper {
  private readonly stream: RandomStream;
  private readonly scale: number;
  private readonly sections: readonly Section[];

  /** @param rateHz below 63 Hz nothing of the band is left, and all samples are zero */
  constructor(stream: RandomStream, rateHz: number) {
    const upperHz = Math.min(BAND_HZ[1], ANTI_ALIAS * rateHz);
    this.stream = stream;
    this.scale = upperHz > 1.25 * BAND_HZ[0] ? Math.sqrt(rateHz / 2 / (BAND_HZ[1] - BAND_HZ[0])) : 0;
    this.sections = this.scale === 0 ? [] : [section(BAND_HZ[0], rateHz, true), section(upperHz, rateHz, false)];
  }

  /** Noise times the root of a power that is constant over stretches; added to `into`. */
  add(into: Float64Array, count: number, powerOf: (sample: number) => number, scratch: Float64Array): void {
    if (this.scale === 0) return;
    this.stream.normals(scratch, count);
    for (const each of this.sections) filter(each, scratch, count);
    let power = 0;
    let gain = 0;
    for (let i = 0; i < count; i++) {
      const next = powerOf(i);
      if (next !== power) {
        power = next;
        gain = this.scale * Math.sqrt(power);
      }
      into[i] = into[i]! + gain * scratch[i]!;
    }
  }
}

interface Section {
  b0: number;
  b1: number;
  a1: number;
  a2: number;
  /** Transposed direct form II. */
  s1: number;
  s2: number;
}

/** Second-order Butterworth section by the bilinear transform with its corner kept. */
function section(cornerHz: number, rateHz: number, highPass: boolean): Section {
  const k = Math.tan((Math.PI * cornerHz) / rateHz);
  const norm = 1 / (1 + Math.SQRT2 * k + k * k);
  const b0 = (highPass ? 1 : k * k) * norm;
  return {
    b0,
    b1: (highPass ? -2 : 2) * b0,
    a1: 2 * (k * k - 1) * norm,
    a2: (1 - Math.SQRT2 * k + k * k) * norm,
    s1: 0,
    s2: 0,
  };
}

function filter(state: Section, samples: Float64Array, count: number): void {
  const { b0, b1, a1, a2 } = state;
  let { s1, s2 } = state;
  for (let i = 0; i < count; i++) {
    const x = samples[i]!;
    const y = b0 * x + s1;
    s1 = b1 * x - a1 * y + s2;
    s2 = b0 * x - a2 * y;
    samples[i] = y;
  }
  state.s1 = s1;
  state.s2 = s2;
}
