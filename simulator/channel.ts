import { bridgeLengthM, countsAxles, type BridgeDefinition, type Sensor } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { HISTORY, STRETCHES, type Deck, type RunningTrain } from './deck.ts';
import { trackOf, type BridgeModel } from './model.ts';
import {
  ANTI_ALIAS,
  noiseKernel,
  noiseMap,
  noisePower,
  NoiseShaper,
  type NoiseKernel,
  type NoiseMap,
} from './noise.ts';
import { blowPower, type FaultEvent, type SceneEvent } from './nuisance.ts';
import type { BridgeParameters } from './parameters.ts';
import type { PassageEvent } from './passage.ts';
import { RandomStream } from './random.ts';
import { Readout } from './readout.ts';

/** Channels of one rate share the places of their samples between the deck's steps. */
export interface RateGroup {
  rateHz: number;
  stepsPerSample: number;
  /** Samples made so far, and those of the slot at hand. */
  produced: number;
  count: number;
  /** Step before each sample, counted from the slot's start (may be −1), and the share of a step beyond it. */
  step: Int32Array;
  share: Float64Array;
  aligned: boolean;
}

export interface ChannelSettings {
  definition: BridgeDefinition;
  sensor: Sensor;
  model: BridgeModel;
  parameters: BridgeParameters;
  seed: number;
  group: RateGroup;
  /** What the sensor feels of each mode. */
  factors: readonly number[];
  deckAcceleration: boolean;
  keepClean: boolean;
}

/** Rail strain under an axle, µm/m per kN, and half-width of the pulse: the main lobe of Zimmermann's rail, m. */
const RAIL_STRAIN = 1.5;
const PULSE_M = { strain: 0.35, detector: 0.15 } as const;
/** Where a pulse has died away, in half-widths. */
const PULSE_REACH = 5;

/** One sensor's samples: what it feels, hears and counts, and what its electronics make of that. */
export class Channel {
  readonly sensor: Sensor;
  readonly group: RateGroup;
  readonly deckAcceleration: boolean;
  /** Samples handed out so far. */
  taken = 0;

  private readonly settings: ChannelSettings;
  private readonly bridgeLengthM: number;
  private readonly heard: readonly { mode: number; factor: number }[];
  private readonly felt: readonly { mode: number; factor: number }[];
  private readonly usesDisplacement: boolean;
  private readonly kernel: NoiseKernel;
  private readonly shaper: NoiseShaper;
  private readonly readout: Readout;
  private readonly maps = new Map<PassageEvent, NoiseMap>();
  private readonly track: number;
  private readonly power = new Float64Array(STRETCHES);
  private readonly signal: Float64Array;
  private readonly scratch: Float64Array;
  private raw = new Queue();
  private clean = new Queue();

  constructor(settings: ChannelSettings) {
    const { definition, sensor, model, parameters, seed, group, factors } = settings;
    this.settings = settings;
    this.sensor = sensor;
    this.group = group;
    this.deckAcceleration = settings.deckAcceleration;
    this.bridgeLengthM = bridgeLengthM(definition);
    this.felt = factors.map((factor, mode) => ({ mode, factor })).filter(({ factor }) => factor !== 0);
    // the logger's anti-alias filter takes modes near its half rate away
    const heardHz = sensor.quantity === 'acceleration' ? ANTI_ALIAS * group.rateHz : Infinity;
    this.heard = this.felt.filter(({ mode }) => model.modes[mode]!.frequencyHz < heardHz);
    this.usesDisplacement = sensor.quantity === 'displacement' || sensor.quantity === 'strain';
    this.kernel = noiseKernel(definition, sensor, parameters.wheelRail);
    this.shaper = new NoiseShaper(new RandomStream(seed, `wheel-rail/${sensor.id}`), group.rateHz);
    this.readout = new Readout(sensor, parameters.sensors[sensor.id] ?? {}, seed);
    this.track = trackOf(sensor, model);
    this.signal = new Float64Array(group.step.length);
    this.scratch = new Float64Array(group.step.length);
  }

  /** Make the samples that the deck's newest slot settles. */
  produce(
    deck: Deck,
    trains: readonly RunningTrain[],
    events: readonly SceneEvent[],
    firstMicros: Micros,
    slotMicros: number,
  ): void {
    const { count } = this.group;
    const { signal } = this;
    signal.fill(0, 0, count);
    this.feel(deck);
    if (countsAxles(this.sensor)) for (const train of trains) this.countAxles(train);
    if (this.sensor.quantity === 'temperature') this.takeTemperature(firstMicros);
    if (this.settings.keepClean) this.clean.put(signal, count);
    if (this.sensor.quantity === 'acceleration') this.hear(deck, trains, events, slotMicros);
    const faults = events.filter(
      (event): event is FaultEvent => event.kind === 'fault' && event.sensor === this.sensor.id,
    );
    this.readout.apply(signal, count, firstMicros, faults, this.scratch);
    this.raw.put(signal, count);
  }

  take(count: number): { samples: Float64Array; clean: Float64Array } {
    this.taken += count;
    return { samples: this.raw.take(count), clean: this.clean.take(this.settings.keepClean ? count : 0) };
  }

  forget(event: PassageEvent): void {
    this.maps.delete(event);
  }

  /** Largest magnitude of the deck's acceleration at this sensor, all modes, among the steps from … to. */
  largest(deck: Deck, from: number, to: number): { value: number; index: number } {
    let value = 0;
    let index = from;
    for (let j = from; j <= to; j++) {
      const here = Math.abs(this.accelerationAt(deck, j));
      if (here > value) {
        value = here;
        index = j;
      }
    }
    return { value: this.crest(deck, index), index };
  }

  /** Height of the parabola through a step and its neighbours. */
  private crest(deck: Deck, index: number): number {
    const last = deck.stepsPerSlot + HISTORY;
    const [a, b, c] = [index - 1, index, Math.min(index + 1, last)].map((j) => Math.abs(this.accelerationAt(deck, j)));
    const bend = a! - 2 * b! + c!;
    return b! < a! || b! < c! || bend === 0 ? b! : b! - (a! - c!) ** 2 / (8 * bend);
  }

  /** The deck's acceleration at this sensor, all modes, at one step. */
  private accelerationAt(deck: Deck, j: number): number {
    let sum = 0;
    for (const { mode, factor } of this.felt) sum += factor * deck.acceleration[mode]![j]!;
    return sum;
  }

  private feel(deck: Deck): void {
    const series = this.usesDisplacement ? deck.displacement : deck.acceleration;
    for (const { mode, factor } of this.heard) {
      if (this.group.aligned) pick(series[mode]!, factor, this.group, this.signal);
      else interpolate(series[mode]!, factor, this.group, this.signal);
    }
  }

  /** One pulse an axle: Gaussian over the distance from the sensor. */
  private countAxles({ event, wayM }: RunningTrain): void {
    if ((event.track ?? 0) !== this.track) return;
    const strain = this.sensor.quantity === 'strain';
    const halfM = strain ? PULSE_M.strain : PULSE_M.detector;
    const place = event.direction === 'rising' ? this.sensor.alongM : this.bridgeLengthM - this.sensor.alongM;
    const { count, step, share } = this.group;
    const reach = PULSE_REACH * halfM;
    const first = wayM[0]! - place;
    const last = wayM[wayM.length - 1]! - place;
    for (const axle of event.train.axles) {
      if (axle.behindFirstM > last + reach || axle.behindFirstM < first - reach) continue;
      const height = strain ? RAIL_STRAIN * axle.loadKn : 1;
      for (let i = 0; i < count; i++) {
        const away = (wayAt(wayM, step[i]!, share[i]!) - place - axle.behindFirstM) / halfM;
        if (Math.abs(away) < PULSE_REACH) this.signal[i] = this.signal[i]! + height * Math.exp(-0.5 * away * away);
      }
    }
  }

  private takeTemperature(firstMicros: Micros): void {
    const { weather } = this.settings.model;
    const { mount } = this.sensor;
    const value =
      mount === 'air'
        ? weather.airC(firstMicros)
        : mount === 'ballast'
          ? weather.ballastC(firstMicros)
          : weather.steelC(firstMicros);
    this.signal.fill(value, 0, this.group.count);
  }

  /** Wheel–rail noise and the ringing of blows. */
  private hear(deck: Deck, trains: readonly RunningTrain[], events: readonly SceneEvent[], slotMicros: number): void {
    const { power } = this;
    power.fill(0);
    for (const train of trains) {
      const map = this.mapOf(train.event);
      for (let s = 0; s < STRETCHES; s++) {
        const j = s * deck.stepsPerStretch;
        power[s] = power[s]! + noisePower(map, train.wayM[j]!, train.speedMs[j]!);
      }
    }
    for (const event of events) {
      if (event.kind !== 'blow') continue;
      for (let s = 0; s < STRETCHES; s++) {
        const micros = slotMicros + s * deck.stepsPerStretch * deck.stepS * MICROS_PER_SECOND;
        power[s] = power[s]! + blowPower(event, micros, this.sensor.alongM);
      }
    }
    if (power.every((value) => value === 0)) return;
    const { step, count } = this.group;
    const perStretch = 1 / deck.stepsPerStretch;
    const powerOf = (i: number): number => power[Math.max(0, Math.floor(step[i]! * perStretch))]!;
    this.shaper.add(this.signal, count, powerOf, this.scratch);
  }

  private mapOf(event: PassageEvent): NoiseMap {
    let map = this.maps.get(event);
    if (map === undefined) {
      map = noiseMap(this.kernel, event, this.bridgeLengthM);
      this.maps.set(event, map);
    }
    return map;
  }
}

function wayAt(wayM: Float64Array, step: number, share: number): number {
  // step −1 belongs to the slot before: go on straight
  const left = Math.max(0, step);
  return wayM[left]! + (step - left + share) * (wayM[left + 1]! - wayM[left]!);
}

function pick(series: Float64Array, factor: number, group: RateGroup, into: Float64Array): void {
  const { count, step } = group;
  for (let i = 0; i < count; i++) into[i] = into[i]! + factor * series[step[i]! + HISTORY]!;
}

/** Cubic through two steps on either side (Lagrange): right to 3e-5 for 50 Hz at 2000 steps/s. */
function interpolate(series: Float64Array, factor: number, group: RateGroup, into: Float64Array): void {
  const { count, step, share } = group;
  for (let i = 0; i < count; i++) {
    const j = step[i]! + HISTORY;
    const t = share[i]!;
    const a = series[j - 1]!;
    const b = series[j]!;
    const c = series[j + 1]!;
    const d = series[j + 2]!;
    const value =
      (-a * t * (t - 1) * (t - 2)) / 6 +
      (b * (t + 1) * (t - 1) * (t - 2)) / 2 -
      (c * (t + 1) * t * (t - 2)) / 2 +
      (d * (t + 1) * t * (t - 1)) / 6;
    into[i] = into[i]! + factor * value;
  }
}

/** Samples waiting to be taken. */
class Queue {
  private values = new Float64Array(1024);
  private length = 0;

  put(from: Float64Array, count: number): void {
    if (this.length + count > this.values.length) {
      const larger = new Float64Array(2 * (this.length + count));
      larger.set(this.values.subarray(0, this.length));
      this.values = larger;
    }
    this.values.set(from.subarray(0, count), this.length);
    this.length += count;
  }

  take(count: number): Float64Array {
    const taken = this.values.slice(0, count);
    this.values.copyWithin(0, count, this.length);
    this.length -= count;
    return taken;
  }
}
