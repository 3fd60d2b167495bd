import type { Sensor } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { unitConversion } from '#core/contract/units.ts';
import type { FaultEvent } from './nuisance.ts';
import type { SensorParameters } from './parameters.ts';
import { RandomStream } from './random.ts';

/** Usual noise of a sensor, r.m.s. in SI: a good MEMS accelerometer, a full strain bridge. */
const USUAL_NOISE: Readonly<Record<Sensor['quantity'], number>> = {
  acceleration: 0.004,
  strain: 1,
  displacement: 0.01,
  temperature: 0.03,
  'axle detector': 0.01,
};

const USUAL_BITS = 16;
const DRIFT_PERIOD_S = 1800;

/**
 * From what happens at a sensor to what its logger sends: noise, offset, drift, spikes, faults, the range and the
 * steps of the converter, and the way back from SI to raw counts of the definition's scale and offset.
 */
export class Readout {
  private readonly sensor: Sensor;
  private readonly parameters: SensorParameters;
  private readonly noiseRms: number;
  private readonly noise: RandomStream;
  private readonly chance: RandomStream;
  private readonly driftPhase: number;
  private readonly factor: number;
  private readonly shift: number;
  private readonly stepUnit: number;

  constructor(sensor: Sensor, parameters: SensorParameters, seed: number) {
    const conversion = unitConversion(sensor.unit, sensor.quantity);
    if (conversion === null) throw new RangeError(`${sensor.id}: ${sensor.unit} is no unit of ${sensor.quantity}`);
    this.sensor = sensor;
    this.parameters = parameters;
    this.noiseRms = parameters.noiseRms ?? USUAL_NOISE[sensor.quantity];
    this.noise = new RandomStream(seed, `noise/${sensor.id}`);
    this.chance = new RandomStream(seed, `spikes/${sensor.id}`);
    this.driftPhase = this.chance.uniform(0, 2 * Math.PI);
    this.factor = conversion.factor;
    this.shift = conversion.shift;
    const bits = parameters.bits ?? USUAL_BITS;
    const range = sensor.range;
    this.stepUnit = range === undefined || bits === 0 ? 0 : (range[1]! - range[0]!) / 2 ** bits;
  }

  /**
   * Turn SI values into raw ones, in place.
   *
   * @param values `count` values in SI
   * @param startMicros time of the first
   * @param scratch of at least that length
   */
  apply(
    values: Float64Array,
    count: number,
    startMicros: Micros,
    faults: readonly FaultEvent[],
    scratch: Float64Array,
  ): void {
    const { gainError = 0, offset = 0, drift = 0 } = this.parameters;
    this.noise.normals(scratch, count);
    const phase = (2 * Math.PI * startMicros) / (DRIFT_PERIOD_S * MICROS_PER_SECOND) + this.driftPhase;
    const add = offset + drift * Math.sin(phase);
    const gain = 1 + gainError;
    const { noiseRms } = this;
    if (noiseRms > 0) for (let i = 0; i < count; i++) values[i] = values[i]! * gain + add + noiseRms * scratch[i]!;
    else for (let i = 0; i < count; i++) values[i] = values[i]! * gain + add;
    const { spikesPerHour = 0, spikeHeight = 0 } = this.parameters;
    if (spikesPerHour > 0) this.spike(values, count, spikesPerHour / 3600, spikeHeight);
    for (const fault of faults) this.spoil(values, count, startMicros, fault, scratch);
    this.convert(values, count);
  }

  private convert(values: Float64Array, count: number): void {
    const { range, scale = 1, offset = 0 } = this.sensor;
    const { factor, shift, stepUnit } = this;
    const low = range?.[0] ?? -Infinity;
    const high = range?.[1] ?? Infinity;
    const plain = stepUnit === 0 && range === undefined;
    for (let i = 0; i < count; i++) {
      let unit = (values[i]! - shift) / factor;
      if (!plain) {
        if (stepUnit > 0) unit = Math.round(unit / stepUnit) * stepUnit;
        unit = unit < low ? low : unit > high ? high : unit;
      }
      values[i] = (unit - offset) / scale;
    }
  }

  private spike(values: Float64Array, count: number, perSecond: number, height: number): void {
    const probability = perSecond / this.sensor.rateHz;
    // time to the next spike is geometric: one draw a spike would do, one a call keeps it simple and split-proof
    for (let i = 0; i < count; i++) {
      if (this.chance.chance(probability)) values[i] = values[i]! + height * this.chance.uniform(-1, 1);
    }
  }

  private spoil(
    values: Float64Array,
    count: number,
    startMicros: Micros,
    fault: FaultEvent,
    noise: Float64Array,
  ): void {
    const sampleMicros = MICROS_PER_SECOND / this.sensor.rateHz;
    const first = Math.max(0, Math.ceil((fault.fromMicros - startMicros) / sampleMicros));
    const last = Math.min(count, Math.ceil((fault.toMicros - startMicros) / sampleMicros));
    for (let i = first; i < last; i++) {
      const progress = (startMicros + i * sampleMicros - fault.fromMicros) / (fault.toMicros - fault.fromMicros);
      values[i] = this.spoiled(values[i]!, noise[i]!, progress, fault);
    }
  }

  private spoiled(value: number, noise: number, progress: number, fault: FaultEvent): number {
    switch (fault.what) {
      case 'flat':
        return fault.size;
      case 'noise only':
        return fault.size * this.noiseRms * noise;
      case 'noisy':
        return value + (fault.size - 1) * progress * this.noiseRms * noise;
      case 'drift':
        return value + progress * fault.size;
      case 'spikes': {
        const hit = this.chance.chance(fault.size / this.sensor.rateHz);
        return hit ? value + (this.sensor.quantity === 'strain' ? 800 : 12) * this.chance.uniform(-1, 1) : value;
      }
    }
  }
}
