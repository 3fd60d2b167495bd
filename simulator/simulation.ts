import { isDeckAcceleration, type BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';
import { Channel, type RateGroup } from './channel.ts';
import { Deck, HISTORY, type RunningTrain } from './deck.ts';
import { createModel, feels, sensorFactor, type BridgeModel } from './model.ts';
import { HEARD_M } from './noise.ts';
import { extent, type SceneEvent } from './nuisance.ts';
import type { BridgeParameters } from './parameters.ts';
import { arrival, courseOf, offMicros, type PassageEvent } from './passage.ts';
import { trainLengthM } from './train.ts';
import { passageTruth, PEAK_TAIL_S, type PassageTruth } from './truth.ts';

/** A bridge in an invented world: endless streams of samples, the same for the same seed however they are cut. */
export interface BridgeSimulation {
  readonly model: BridgeModel;
  /**
   * Make something happen. An event must be announced at least LEAD_S before it begins (a passage begins with its
   * first axle on the bridge); announced later, its beginning is missing.
   */
  schedule(event: SceneEvent): void;
  /** Samples of all channels from where the last call ended until just before a time. */
  advance(toMicros: Micros): SimulatedChannel[];
  /** Passages whose trains have left and whose peaks are known, in order of leaving; each is given once. */
  takeTruths(): PassageTruth[];
}

/** How long ahead an event must be known, s: the way of a slow train that is already heard, and the slot computed. */
export const LEAD_S = 15;

export interface SimulatedChannel {
  sensor: string;
  rateHz: number;
  /** Time of the first sample. */
  startMicros: Micros;
  /** Raw, in the sensor's unit before its scale and offset. */
  samples: Float64Array;
  /** The same in SI without noise and faults, where asked for; else empty. */
  clean: Float64Array;
}

export interface SimulationOptions {
  definition: BridgeDefinition;
  parameters: BridgeParameters;
  seed: number;
  /** Time of the first sample of every channel. */
  startMicros: Micros;
  /** Keep the samples as they would be without noise and faults too. */
  keepClean?: boolean;
}

/**
 * Slowest internal rate, a multiple of the fastest channel's. Stepping is exact for a force that is linear within a
 * step, and the weight of an axle changes smoothly, so a millisecond does; where the samples of some channel fall
 * between the steps, half of it keeps the interpolation right.
 */
const INTERNAL_HZ = { aligned: 1000, between: 2000 } as const;

export function createBridgeSimulation(options: SimulationOptions): BridgeSimulation {
  return new Simulation(options);
}

class Simulation implements BridgeSimulation {
  readonly model: BridgeModel;
  private readonly startMicros: Micros;
  private readonly deck: Deck;
  private readonly groups: RateGroup[];
  private readonly channels: Channel[];
  private readonly events: SceneEvent[] = [];
  private readonly running = new Map<PassageEvent, RunningTrain>();
  private open: { event: PassageEvent; truth: PassageTruth; untilMicros: number }[] = [];
  private finished: PassageTruth[] = [];

  constructor({ definition, parameters, seed, startMicros, keepClean = false }: SimulationOptions) {
    this.startMicros = startMicros;
    this.model = createModel(definition, parameters, seed);
    const rates = [...new Set(definition.sensors.map((sensor) => sensor.rateHz))];
    const internalHz = internalRateHz(rates);
    const displaces = definition.sensors.some((each) => each.quantity === 'displacement' || each.quantity === 'strain');
    this.deck = new Deck({ model: this.model, parameters, seed, startMicros, rateHz: internalHz, displaces });
    this.groups = rates.map((rateHz) => rateGroup(rateHz, internalHz, this.deck.stepsPerSlot));
    this.channels = definition.sensors.map(
      (sensor) =>
        new Channel({
          definition,
          sensor,
          model: this.model,
          parameters,
          seed,
          group: this.groups[rates.indexOf(sensor.rateHz)]!,
          factors: this.model.modes.map((mode) => (feels(definition, sensor, mode) ? sensorFactor(sensor, mode) : 0)),
          deckAcceleration: isDeckAcceleration(sensor),
          keepClean,
        }),
    );
  }

  schedule(event: SceneEvent): void {
    this.events.push(event);
  }

  advance(toMicros: Micros): SimulatedChannel[] {
    while (this.groups.some((group) => this.timeOf(group, group.produced) < toMicros)) this.slot();
    return this.channels.map((channel) => {
      const { group } = channel;
      const from = channel.taken;
      let end = Math.max(from, Math.floor(((toMicros - this.startMicros) * group.rateHz) / MICROS_PER_SECOND) - 1);
      while (this.timeOf(group, end) < toMicros) end++;
      return {
        sensor: channel.sensor.id,
        rateHz: group.rateHz,
        startMicros: this.timeOf(group, from),
        ...channel.take(end - from),
      };
    });
  }

  takeTruths(): PassageTruth[] {
    const taken = this.finished;
    this.finished = [];
    return taken;
  }

  private timeOf(group: RateGroup, sample: number): Micros {
    return sampleMicros(this.startMicros, sample, group.rateHz);
  }

  /** Compute a slot of the deck's motion and all samples that it settles. */
  private slot(): void {
    const { deck } = this;
    const fromMicros = deck.slotStartMicros();
    const toMicros = fromMicros + deck.stepsPerSlot * deck.stepS * MICROS_PER_SECOND;
    const now = this.events.filter((event) => event.kind === 'passage' || overlaps(event, fromMicros, toMicros));
    this.board(now, fromMicros, toMicros);
    const trains = [...this.running.values()];
    deck.advance({
      trains,
      blows: now.filter((event) => event.kind === 'blow'),
      winds: now.filter((event) => event.kind === 'wind'),
      walkers: now.filter((event) => event.kind === 'walker'),
    });
    // the last step and a half of a slot wait for the next one: interpolation needs two points on either side
    const settled = deck.slots * deck.stepsPerSlot - 1;
    const slotStart = (deck.slots - 1) * deck.stepsPerSlot;
    for (const group of this.groups) settle(group, settled, slotStart);
    for (const channel of this.channels) {
      channel.produce(deck, trains, now, this.timeOf(channel.group, channel.group.produced), fromMicros);
    }
    for (const group of this.groups) group.produced += group.count;
    this.watchPeaks(fromMicros, toMicros);
    this.forget(toMicros);
  }

  /** Take up trains that begin to be heard, and let go those that no longer are. */
  private board(events: readonly SceneEvent[], fromMicros: number, toMicros: number): void {
    const { lengthM } = this.model;
    for (const event of events) {
      if (event.kind !== 'passage' || this.running.has(event)) continue;
      const course = courseOf(event);
      const heardMicros = event.onMicros + arrival(course, -HEARD_M).seconds * MICROS_PER_SECOND;
      if (heardMicros >= toMicros) continue;
      const silentS = arrival(course, lengthM + trainLengthM(event.train) + HEARD_M).seconds;
      if (event.onMicros + silentS * MICROS_PER_SECOND < fromMicros) continue;
      const steps = this.deck.stepsPerSlot + 1;
      this.running.set(event, { event, course, wayM: new Float64Array(steps), speedMs: new Float64Array(steps) });
      const truth = passageTruth(event, this.model, this.events);
      truth.peaks = this.channels
        .filter((channel) => channel.deckAcceleration)
        .map((channel) => ({ sensor: channel.sensor.id, peakMs2: 0, micros: event.onMicros }));
      const untilMicros = truth.offMicros + PEAK_TAIL_S * MICROS_PER_SECOND;
      this.open.push({ event, truth, untilMicros });
    }
    for (const event of this.running.keys()) {
      const silentS = arrival(courseOf(event), lengthM + trainLengthM(event.train) + HEARD_M).seconds;
      if (event.onMicros + silentS * MICROS_PER_SECOND < fromMicros) {
        this.running.delete(event);
        for (const channel of this.channels) channel.forget(event);
      }
    }
  }

  private watchPeaks(fromMicros: number, toMicros: number): void {
    for (const watch of this.open) {
      // a train that comes later takes over
      const next = this.open.find((other) => other.truth.onMicros > watch.truth.offMicros);
      const until = Math.min(watch.untilMicros, next?.truth.onMicros ?? Infinity);
      const stepMicros = this.deck.stepS * MICROS_PER_SECOND;
      const from = Math.max(1, Math.ceil((watch.truth.onMicros - fromMicros) / stepMicros));
      const to = Math.min(this.deck.stepsPerSlot, Math.floor((until - fromMicros) / stepMicros));
      if (from > to) continue;
      for (const peak of watch.truth.peaks) {
        const channel = this.channels.find(({ sensor }) => sensor.id === peak.sensor)!;
        const found = channel.largest(this.deck, HISTORY + from, HISTORY + to);
        if (found.value > peak.peakMs2) {
          peak.peakMs2 = found.value;
          peak.micros = Math.round(fromMicros + (found.index - HISTORY) * stepMicros);
        }
      }
    }
    for (const { event, truth } of this.open.filter((watch) => watch.untilMicros < toMicros)) {
      // what was announced after the train began to be heard counts too
      truth.nuisances = passageTruth(event, this.model, this.events).nuisances;
      this.finished.push(truth);
    }
    this.open = this.open.filter((watch) => watch.untilMicros >= toMicros);
  }

  /** Drop events that are over for good; a passage stays as long as its truth may name it. */
  private forget(toMicros: number): void {
    const longAgo = toMicros - 600 * MICROS_PER_SECOND;
    const over = (event: SceneEvent): boolean =>
      event.kind === 'passage'
        ? !this.running.has(event) && offMicros(event, this.model.lengthM) < longAgo
        : extent(event).toMicros < longAgo;
    for (let i = this.events.length - 1; i >= 0; i--) if (over(this.events[i]!)) this.events.splice(i, 1);
  }
}

function overlaps(event: Exclude<SceneEvent, PassageEvent>, fromMicros: number, toMicros: number): boolean {
  const { fromMicros: from, toMicros: to } = extent(event);
  return from < toMicros && to > fromMicros;
}

function internalRateHz(rates: readonly number[]): number {
  const fastest = Math.max(...rates);
  const multiple = (leastHz: number): number => fastest * Math.max(1, Math.ceil(leastHz / fastest));
  const aligned = multiple(INTERNAL_HZ.aligned);
  return rates.every((rate) => aligned % rate === 0) ? aligned : multiple(INTERNAL_HZ.between);
}

function rateGroup(rateHz: number, internalHz: number, stepsPerSlot: number): RateGroup {
  const most = Math.ceil((stepsPerSlot * rateHz) / internalHz) + 2;
  return {
    rateHz,
    stepsPerSample: internalHz / rateHz,
    produced: 0,
    count: 0,
    step: new Int32Array(most),
    share: new Float64Array(most),
    aligned: internalHz % rateHz === 0,
  };
}

/** Find the samples of a group that a slot settles, and where they lie between its steps. */
function settle(group: RateGroup, settledStep: number, slotStart: number): void {
  let count = 0;
  for (;;) {
    const at = (group.produced + count) * group.stepsPerSample;
    if (at >= settledStep) break;
    const whole = Math.floor(at);
    group.step[count] = whole - slotStart;
    group.share[count] = at - whole;
    count++;
  }
  group.count = count;
}
