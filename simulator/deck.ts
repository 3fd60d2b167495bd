import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import {
  createOscillators,
  run,
  tuneToAmplitude,
  type AmplitudeLaw,
  type Oscillators,
} from '#core/mechanics/modal-step.ts';
import type { BridgeModel, ModelMode } from './model.ts';
import {
  blowForceN,
  pointFactor,
  walkerForce,
  windRms,
  type BlowEvent,
  type WalkerEvent,
  type WindEvent,
} from './nuisance.ts';
import type { BridgeParameters } from './parameters.ts';
import { trace, type Course, type PassageEvent } from './passage.ts';
import { RandomStream } from './random.ts';

/** Shape tables have this many intervals; linear between them a third mode is right to 3e-6. */
const TABLE = 2048;
/** Time between two tunings of the modes, s. */
const STRETCH_S = 0.005;
/** Stretches in a slot: what is computed at a time, about 0.1 s. */
export const STRETCHES = 20;
/** Entries kept before a slot, for interpolation. */
export const HISTORY = 2;
/** Below this a mode at rest is left at rest, m. */
const ASLEEP_M = 1e-13;

/** A train while it may be felt. */
export interface RunningTrain {
  event: PassageEvent;
  course: Course;
  /** Way and speed of its first axle at the steps of the slot. */
  wayM: Float64Array;
  speedMs: Float64Array;
}

export interface DeckSettings {
  model: BridgeModel;
  parameters: BridgeParameters;
  seed: number;
  startMicros: Micros;
  /** Steps per second. */
  rateHz: number;
  /** Whether displacements are wanted beside accelerations. */
  displaces: boolean;
}

export interface DeckEvents {
  trains: readonly RunningTrain[];
  blows: readonly BlowEvent[];
  winds: readonly WindEvent[];
  walkers: readonly WalkerEvent[];
}

/**
 * The moving deck: all modes, stepped slot by slot on a fixed grid of time, so that results do not depend on how
 * far ahead anyone asks.
 */
export class Deck {
  readonly stepS: number;
  readonly stepsPerStretch: number;
  readonly stepsPerSlot: number;
  /** Acceleration and displacement of each mode: HISTORY entries of before, the slot's start, its steps. */
  readonly acceleration: readonly Float64Array[];
  readonly displacement: readonly Float64Array[];
  /** Number of slots done. */
  slots = 0;

  private readonly model: BridgeModel;
  private readonly ambientMs2: number;
  private readonly displaces: boolean;
  private readonly unsprungMass: boolean;
  private readonly startMicros: Micros;
  private readonly oscillators: Oscillators;
  private readonly laws: AmplitudeLaw[];
  private readonly tables: readonly Float64Array[];
  private readonly forces: readonly Float64Array[];
  /** Added mass over modal mass, per stretch. */
  private readonly added: readonly Float64Array[];
  private readonly streams: readonly RandomStream[];
  /** State of the wind's low-passes, for each mode. */
  private readonly reds: [number, number][];
  private readonly knots: readonly Float64Array[];
  /** Modes that share a place: an axle's position in the shape is worked out once for them. */
  private readonly places: readonly { startM: number; lengthM: number; modes: number[] }[];
  private readonly cell: Int32Array;
  private readonly share: Float64Array;
  private lawSecond = -1;

  constructor({ model, parameters, seed, startMicros, rateHz, displaces }: DeckSettings) {
    this.model = model;
    this.ambientMs2 = parameters.ambientMs2;
    this.displaces = displaces;
    this.unsprungMass = parameters.structure.unsprungMass;
    this.startMicros = startMicros;
    this.stepS = 1 / rateHz;
    this.stepsPerStretch = Math.max(1, Math.round(STRETCH_S * rateHz));
    this.stepsPerSlot = STRETCHES * this.stepsPerStretch;
    const { modes } = model;
    const perMode = (length: number): Float64Array[] => modes.map(() => new Float64Array(length));
    this.acceleration = perMode(HISTORY + 1 + this.stepsPerSlot);
    this.displacement = perMode(HISTORY + 1 + this.stepsPerSlot);
    this.forces = perMode(this.stepsPerSlot + 1);
    this.added = perMode(STRETCHES);
    this.knots = perMode(STRETCHES + 1);
    this.reds = this.knots.map(() => [0, 0]);
    this.tables = modes.map(({ shape }) =>
      Float64Array.from({ length: TABLE + 1 }, (_, i) => shape.at(shape.startM + (i * shape.lengthM) / TABLE)),
    );
    this.streams = modes.map((mode, i) => new RandomStream(seed, `ambient/${mode.span.id}/${i}`));
    this.oscillators = createOscillators(modes.length);
    this.laws = [];
    this.places = placesOf(modes);
    this.cell = new Int32Array(this.stepsPerSlot + 1);
    this.share = new Float64Array(this.stepsPerSlot + 1);
  }

  /** Time of the first step of the coming slot, s since the start. */
  slotStartS(): number {
    return this.slots * this.stepsPerSlot * this.stepS;
  }

  slotStartMicros(): number {
    return this.startMicros + this.slotStartS() * MICROS_PER_SECOND;
  }

  /** Compute the coming slot. */
  advance(events: DeckEvents): void {
    this.carryOver();
    this.updateLaws();
    for (const train of events.trains) {
      const seconds = this.slotStartS() - (train.event.onMicros - this.startMicros) / MICROS_PER_SECOND;
      trace(train.course, seconds, this.stepS, train.wayM, train.speedMs);
      this.load(train);
    }
    this.shake(events.winds);
    for (const blow of events.blows) this.strike(blow);
    for (const walker of events.walkers) this.walk(walker);
    for (let m = 0; m < this.model.modes.length; m++) this.stepMode(m);
    this.slots++;
  }

  private carryOver(): void {
    const n = this.stepsPerSlot;
    for (let m = 0; m < this.forces.length; m++) {
      this.acceleration[m]!.copyWithin(0, n, n + HISTORY + 1);
      this.displacement[m]!.copyWithin(0, n, n + HISTORY + 1);
      this.forces[m]!.copyWithin(0, n, n + 1);
      this.forces[m]!.fill(0, 1);
      this.added[m]!.fill(0);
    }
  }

  /** Temperature and condition change slowly: once a second is often enough. */
  private updateLaws(): void {
    const second = Math.floor(this.slotStartS());
    if (second === this.lawSecond) return;
    this.lawSecond = second;
    const micros = this.startMicros + second * MICROS_PER_SECOND;
    this.model.modes.forEach((mode, i) => (this.laws[i] = this.model.lawAt(mode, micros)));
  }

  /** The weight of a train's axles on all modes. */
  private load({ event, wayM }: RunningTrain): void {
    const n = this.stepsPerSlot;
    const trackM = this.model.tracksM[event.track ?? 0] ?? 0;
    const rising = event.direction === 'rising';
    const first = wayM[0]!;
    const last = wayM[n]!;
    for (const place of this.places) {
      // way at which an axle enters this place and leaves it
      const enters = rising ? place.startM : this.model.lengthM - place.startM - place.lengthM;
      const scale = TABLE / place.lengthM;
      for (const axle of event.train.axles) {
        const near = axle.behindFirstM + enters;
        if (last <= near || first >= near + place.lengthM) continue;
        const { from, to } = this.locate(wayM, near, scale, rising);
        for (const m of place.modes) {
          const mode = this.model.modes[m]!;
          const lever = mode.kind === 'bending' ? 1 : trackM;
          this.press(m, (1000 * axle.loadKn * lever) / mode.massKg, from, to);
          if (this.unsprungMass) this.burden(m, (axle.unsprungKg * lever ** 2) / mode.massKg, from, to);
        }
      }
    }
  }

  /** Cells of the shape tables that an axle passes; returns the steps at which it is inside. */
  private locate(wayM: Float64Array, near: number, scale: number, rising: boolean): { from: number; to: number } {
    const { cell, share } = this;
    let from = 1;
    let to = 0;
    for (let j = 0; j <= this.stepsPerSlot; j++) {
      const u = (wayM[j]! - near) * scale;
      if (u <= 0) {
        from = j + 1;
        continue;
      }
      if (u >= TABLE) break;
      const v = rising ? u : TABLE - u;
      // the far end itself, where an axle enters there at a step to the last bit, belongs to the last cell
      const i = Math.min(v | 0, TABLE - 1);
      cell[j] = i;
      share[j] = v - i;
      to = j;
    }
    return { from: Math.max(1, from), to };
  }

  private press(m: number, weight: number, from: number, to: number): void {
    const table = this.tables[m]!;
    const force = this.forces[m]!;
    const { cell, share } = this;
    for (let j = from; j <= to; j++) {
      const i = cell[j]!;
      const left = table[i]!;
      force[j] = force[j]! + weight * (left + share[j]! * (table[i + 1]! - left));
    }
  }

  private burden(m: number, ratio: number, from: number, to: number): void {
    const table = this.tables[m]!;
    const added = this.added[m]!;
    for (let s = 0; s < STRETCHES; s++) {
      const near = Math.floor((s + 0.5) * this.stepsPerStretch);
      if (near >= from && near <= to) added[s] = added[s]! + ratio * table[this.cell[near]!]! ** 2;
    }
  }

  /** Wind and the ground's unrest: noise by straight lines between knots at the ends of stretches. */
  private shake(winds: readonly WindEvent[]): void {
    if (this.ambientMs2 === 0 && winds.length === 0) return;
    const knotS = this.stepsPerStretch * this.stepS;
    const first = this.model.modes[0]!;
    // white force of density S gives q a variance of S/(4 ζ ω³) and its acceleration ω⁴ times that
    const whiteScale = (mode: ModelMode): number =>
      Math.sqrt((4 * mode.zeta) / (2 * Math.PI * mode.frequencyHz * knotS));
    const squares = winds.reduce((sum, wind) => sum + windRms(wind, this.slotStartMicros()) ** 2, 0);
    const gust = (Math.sqrt(squares) * whiteScale(first)) / redGain(first.frequencyHz, knotS);
    this.model.modes.forEach((mode, m) => {
      const knots = this.knots[m]!;
      knots[0] = knots[STRETCHES]!;
      const fresh = knots.subarray(1);
      this.streams[m]!.normals(fresh, STRETCHES);
      const scale = this.ambientMs2 * whiteScale(mode);
      const red = this.reds[m]!;
      for (let s = 0; s < STRETCHES; s++) {
        const white = fresh[s]!;
        reddenInto(red, white, knotS);
        fresh[s] = scale * white + (mode.kind === 'bending' ? gust * red[1] : 0);
      }
      const force = this.forces[m]!;
      const n = this.stepsPerStretch;
      for (let s = 0; s < STRETCHES; s++) {
        const slope = (knots[s + 1]! - knots[s]!) / n;
        for (let k = 1; k <= n; k++) force[s * n + k] = force[s * n + k]! + knots[s]! + slope * k;
      }
    });
  }

  private strike(blow: BlowEvent): void {
    const start = this.slotStartMicros();
    const stepMicros = this.stepS * MICROS_PER_SECOND;
    const end = blow.micros + blow.lengthS * MICROS_PER_SECOND;
    if (end <= start || blow.micros >= start + this.stepsPerSlot * stepMicros) return;
    const factors = this.model.modes.map((mode) => pointFactor(mode, blow.alongM, blow.acrossM));
    for (let j = 1; j <= this.stepsPerSlot; j++) {
      const forceN = blowForceN(blow, start + j * stepMicros);
      if (forceN !== 0) this.push(factors, forceN, j);
    }
  }

  private walk(walker: WalkerEvent): void {
    const start = this.slotStartMicros();
    const middle = walkerForce(walker, start + (this.stepsPerSlot / 2) * this.stepS * MICROS_PER_SECOND);
    if (middle === null) return;
    const factors = this.model.modes.map((mode) => pointFactor(mode, middle.alongM, 0.8));
    for (let j = 1; j <= this.stepsPerSlot; j++) {
      const now = walkerForce(walker, start + j * this.stepS * MICROS_PER_SECOND);
      if (now !== null) this.push(factors, now.forceN, j);
    }
  }

  private push(factors: readonly number[], forceN: number, j: number): void {
    factors.forEach((factor, m) => (this.forces[m]![j] = this.forces[m]![j]! + factor * forceN));
  }

  private stepMode(m: number): void {
    const { oscillators, stepsPerStretch: n, stepS } = this;
    const force = this.forces[m]!;
    const acceleration = this.acceleration[m]!.subarray(HISTORY);
    const displacement = this.displaces ? this.displacement[m]!.subarray(HISTORY) : null;
    const still = Math.abs(oscillators.re[m]!) < ASLEEP_M && Math.abs(oscillators.im[m]!) < ASLEEP_M;
    if (still && force.every((value) => value === 0)) {
      acceleration.fill(0, 1);
      displacement?.fill(0, 1);
      return;
    }
    const law = this.laws[m]!;
    const loaded: AmplitudeLaw = { ...law };
    for (let s = 0; s < STRETCHES; s++) {
      const at = s * n;
      const heavier = 1 + this.added[m]![s]!;
      if (heavier !== 1) for (let j = at + 1; j <= at + n; j++) force[j] = force[j]! / heavier;
      loaded.f0Hz = law.f0Hz / Math.sqrt(heavier);
      loaded.fallHz = law.fallHz / Math.sqrt(heavier);
      tuneToAmplitude(oscillators, m, loaded, force[at]!, stepS, n * stepS);
      run(oscillators, m, force, at, n, acceleration, displacement);
    }
  }
}

function placesOf(modes: readonly ModelMode[]): { startM: number; lengthM: number; modes: number[] }[] {
  const places: { startM: number; lengthM: number; modes: number[] }[] = [];
  modes.forEach(({ shape }, m) => {
    const same = places.find((place) => place.startM === shape.startM && place.lengthM === shape.lengthM);
    if (same === undefined) places.push({ startM: shape.startM, lengthM: shape.lengthM, modes: [m] });
    else same.modes.push(m);
  });
  return places;
}

/**
 * Wind force falls off with frequency: velocity as f^(−5/3) in power, and gusts smaller than the deck cancel over it
 * (A. G. Davenport 1962). Two first-order low-passes with this corner make f^(−4) above it.
 */
const WIND_CORNER_HZ = 1;

function redStep(knotS: number): number {
  return Math.exp(-2 * Math.PI * WIND_CORNER_HZ * knotS);
}

function reddenInto(red: [number, number], white: number, knotS: number): void {
  const a = redStep(knotS);
  red[0] = a * red[0] + (1 - a) * white;
  red[1] = a * red[1] + (1 - a) * red[0];
}

/** Gain of the two low-passes at a frequency. */
function redGain(hz: number, knotS: number): number {
  const a = redStep(knotS);
  const angle = 2 * Math.PI * hz * knotS;
  return (1 - a) ** 2 / (1 - 2 * a * Math.cos(angle) + a * a);
}
