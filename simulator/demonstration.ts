import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { createLoggers, type BridgeLoggers } from './logger.ts';
import type { SceneEvent } from './nuisance.ts';
import { bridgeParameters, type BridgeParameters, type ConditionPoint } from './parameters.ts';
import { connectLogger, type LoggerPublisher } from './publisher.ts';
import { RandomStream } from './random.ts';
import { simulate } from './scene.ts';
import { createBridgeSimulation, LEAD_S, type BridgeSimulation } from './simulation.ts';
import { createTraffic, type LineTraffic } from './traffic.ts';
import { createTrain, type TrainType } from './train.ts';
import type { PassageTruth } from './truth.ts';

/** The definitions of the demonstration's bridges. */
export const DEMONSTRATION_FILES: readonly URL[] = ['ottermere', 'fennick', 'sallow'].map(
  (id) => new URL(`bridges/${id}.yaml`, import.meta.url),
);

export interface DemonstrationOptions {
  brokerUrl: string;
  /** First level of the topics. */
  root: string;
  clock: () => Micros;
  seed: number;
  /** As read from DEMONSTRATION_FILES. */
  definitions: readonly BridgeDefinition[];
  username?: string | undefined;
  password?: string | undefined;
  onTrouble?: (reason: string) => void;
}

export interface Demonstration {
  /** Ends the streams and disconnects the loggers. May be called twice. */
  stop(): Promise<void>;
}

/** Length of the loggers' blocks. */
const BLOCK_MICROS = 200_000;
/** Quiet samples before the first block goes out let the simulation warm up. */
const WARM_UP_MICROS = LEAD_S * MICROS_PER_SECOND;
/** After a longer pause (a machine asleep, a broker away) the loggers go on at the present and leave a gap. */
const LONGEST_BACKLOG_MICROS = 30 * MICROS_PER_SECOND;
const DAY_MICROS = 86_400 * MICROS_PER_SECOND;

/**
 * The three invented bridges under their invented traffic, live: one MQTT client a logger, blocks of 0.2 s in real time.
 * A regional train reaches the first bridge after 12 s, an intercity at line speed after 40 s.
 */
export async function startDemonstration(options: DemonstrationOptions): Promise<Demonstration> {
  const { definitions, seed, clock } = options;
  const startMicros = Math.ceil(clock() / BLOCK_MICROS) * BLOCK_MICROS;
  const traffic = liveTraffic(definitions, startMicros, seed);
  const bridges = await Promise.all(definitions.map((definition) => openBridge(definition, startMicros, options)));
  let sentMicros = startMicros;
  let timer: NodeJS.Timeout | undefined;
  let running: Promise<void> = Promise.resolve();
  let stopped: Promise<void> | null = null;

  const turn = async (): Promise<void> => {
    const now = clock();
    if (now - sentMicros > LONGEST_BACKLOG_MICROS) {
      sentMicros = Math.floor(now / BLOCK_MICROS) * BLOCK_MICROS;
      announce(traffic, bridges, sentMicros);
      for (const { simulation } of bridges) simulation.advance(sentMicros);
    }
    while (sentMicros + BLOCK_MICROS <= now && stopped === null) {
      sentMicros += BLOCK_MICROS;
      announce(traffic, bridges, sentMicros);
      await Promise.all(bridges.map((bridge) => send(bridge, sentMicros)));
    }
  };
  const schedule = (): void => {
    timer = setTimeout(
      () => {
        running = turn()
          .catch((error: unknown) => options.onTrouble?.(error instanceof Error ? error.message : String(error)))
          .finally(() => {
            if (stopped === null) schedule();
          });
      },
      Math.max(5, (sentMicros + BLOCK_MICROS - clock()) / 1000),
    );
  };
  schedule();
  return {
    stop() {
      stopped ??= (async () => {
        clearTimeout(timer);
        // Ending the connections frees a turn that waits for the broker.
        await Promise.all(bridges.flatMap(({ publishers }) => [...publishers.values()].map((each) => each.stop())));
        await running;
      })();
      return stopped;
    },
  };
}

interface LiveBridge {
  definition: BridgeDefinition;
  simulation: BridgeSimulation;
  loggers: BridgeLoggers;
  publishers: Map<string, LoggerPublisher>;
}

async function openBridge(
  definition: BridgeDefinition,
  startMicros: Micros,
  options: DemonstrationOptions,
): Promise<LiveBridge> {
  const { brokerUrl, root, seed, username, password, onTrouble } = options;
  const simulation = createBridgeSimulation({
    definition,
    parameters: demonstrationParameters(definition, startMicros),
    seed,
    startMicros: startMicros - WARM_UP_MICROS,
  });
  for (const event of demonstrationFaults(definition, startMicros)) simulation.schedule(event);
  const publishers = new Map<string, LoggerPublisher>();
  for (const { id } of definition.loggers) {
    const trouble = onTrouble === undefined ? {} : { onTrouble };
    publishers.set(
      id,
      await connectLogger({ brokerUrl, root, definition, logger: id, username, password, ...trouble }),
    );
  }
  return { definition, simulation, loggers: createLoggers(definition), publishers };
}

function announce(traffic: LineTraffic, bridges: readonly LiveBridge[], nowMicros: Micros): void {
  for (const { passages } of traffic.until(nowMicros + 2 * LEAD_S * MICROS_PER_SECOND)) {
    for (const { bridge, event } of passages) {
      bridges.find(({ definition }) => definition.id === bridge)?.simulation.schedule(event);
    }
  }
}

async function send(bridge: LiveBridge, toMicros: Micros): Promise<void> {
  const { simulation, loggers, publishers } = bridge;
  // What was computed to warm up is dropped with the first block.
  const channels = simulation.advance(toMicros);
  simulation.takeTruths();
  for (const block of loggers.gather(channels.map((channel) => latest(channel, toMicros)))) {
    await publishers.get(block.logger)?.publish(block);
  }
}

/** The part of a channel that belongs to the last block. */
function latest<T extends { startMicros: Micros; rateHz: number; samples: Float64Array }>(
  channel: T,
  toMicros: Micros,
): T {
  const late = toMicros - BLOCK_MICROS - channel.startMicros;
  if (late <= 0) return channel;
  const skip = Math.min(channel.samples.length, Math.ceil((late * channel.rateHz) / MICROS_PER_SECOND));
  const startMicros = channel.startMicros + Math.round((skip * MICROS_PER_SECOND) / channel.rateHz);
  return { ...channel, startMicros, samples: channel.samples.subarray(skip) };
}

function liveTraffic(definitions: readonly BridgeDefinition[], startMicros: Micros, seed: number): LineTraffic {
  const first = definitions.toSorted((a, b) => a.chainageKm - b.chainageKm)[0];
  if (first === undefined) throw new RangeError('a demonstration needs a bridge');
  const after = (seconds: number): Micros => startMicros + seconds * MICROS_PER_SECOND;
  return createTraffic({
    bridges: definitions,
    startMicros,
    seed,
    fixed: [
      { type: 'regional multiple unit', direction: 'falling', speedMs: 36.2, bridge: first.id, onMicros: after(12) },
      { type: 'intercity', direction: 'rising', speedMs: 44.4, bridge: first.id, onMicros: after(40) },
    ],
  });
}

/** How far each bridge has come from what its definition says, as a course over the last months. */
const COURSES: Readonly<Record<string, readonly { daysAgo: number; frequency: number; damping: number }[]>> = {
  // The ballast loosens: resonance with coaches of 26.4 m comes down to the line speed.
  ottermere: [
    { daysAgo: 300, frequency: 1, damping: 1 },
    { daysAgo: 0, frequency: 0.972, damping: 0.96 },
  ],
  // A renewal that went wrong.
  sallow: [
    { daysAgo: 365, frequency: 1, damping: 1 },
    { daysAgo: 0, frequency: 0.985, damping: 1 },
  ],
};

/** The invented bridges as they stand at a moment. */
function demonstrationParameters(definition: BridgeDefinition, nowMicros: Micros): BridgeParameters {
  const course = COURSES[definition.id];
  if (course === undefined) return bridgeParameters(definition);
  const points = course.map(({ daysAgo, frequency, damping }): ConditionPoint => ({
    micros: nowMicros - daysAgo * DAY_MICROS,
    frequency,
    damping,
    amplitudeDependence: 1,
  }));
  return bridgeParameters(definition, { condition: [{ points }] });
}

/** The cable of one sensor of Fennick Lane fails: noise grows over half an hour, with a spike now and then. */
function demonstrationFaults(definition: BridgeDefinition, startMicros: Micros): SceneEvent[] {
  if (definition.id !== 'fennick') return [];
  const at = (minutes: number): Micros => startMicros + minutes * 60 * MICROS_PER_SECOND;
  const cable = { kind: 'fault' as const, sensor: 'A4' };
  return [
    { ...cable, what: 'noisy', size: 20, fromMicros: at(1), toMicros: at(30) },
    { ...cable, what: 'spikes', size: 1 / 300, fromMicros: at(3), toMicros: at(30) },
    { ...cable, what: 'noise only', size: 20, fromMicros: at(30), toMicros: at(60 * 24 * 365) },
  ];
}

// a past to look back on

/** One passage of a past day, with quiet before and after: to be fed through a pipeline of its own. */
export interface PastPassage {
  bridge: string;
  /** The definition it was simulated on. */
  definition: BridgeDefinition;
  /** In order of time; about half a minute. */
  blocks: SampleBlock[];
  truth: PassageTruth;
}

export interface PastOptions {
  definitions: readonly BridgeDefinition[];
  nowMicros: Micros;
  days: number;
  /** Passages a day on each bridge; a real line has more. */
  perDay?: number;
  seed: number;
}

/** Quiet before the first axle: offset and noise floor are learnt from it; and after the last, for the free decay. */
const PAST_BEFORE_S = 16;
const PAST_AFTER_S = 24;

/**
 * Passages of the days before now, oldest first, as samples: what the pipeline makes of them is measured, not invented.
 * Trains run from five to midnight. The same seed, day and hour give the same samples.
 *
 * @yields one passage at a time; each costs some tenths of a second to simulate
 */
export function* pastPassages(options: PastOptions): Generator<PastPassage> {
  const { definitions, nowMicros, days, perDay = 8, seed } = options;
  const today = Math.floor(nowMicros / DAY_MICROS);
  for (let day = pastFromMicros(nowMicros, days) / DAY_MICROS; day <= today; day++) {
    const trains = pastTrains(day, perDay, seed, definitions.length);
    for (const { onMicros, type, speedMs, direction, bridge, number } of trains) {
      const definition = definitions[bridge];
      // The present belongs to the live stream.
      if (definition === undefined || onMicros > nowMicros - 600 * MICROS_PER_SECOND) continue;
      const train = createTrain(type, seed * 1000 + number);
      const event = { kind: 'passage' as const, train, onMicros, speedMs, direction };
      const past = simulatePast(definition, event, options);
      if (past !== null) yield past;
    }
  }
}

/** When the past begins that is made by `pastPassages`: at midnight (UTC), before its first train. */
export function pastFromMicros(nowMicros: Micros, days: number): Micros {
  return (Math.floor(nowMicros / DAY_MICROS) - days) * DAY_MICROS;
}

interface PastTrain {
  onMicros: Micros;
  type: TrainType;
  speedMs: number;
  direction: 'rising' | 'falling';
  bridge: number;
  number: number;
}

function pastTrains(day: number, perDay: number, seed: number, bridges: number): PastTrain[] {
  const random = new RandomStream(seed, `past/${day}`);
  const types: readonly [TrainType, number, number][] = [
    ['intercity', 40, 44.4],
    ['intercity', 40, 44.4],
    ['regional multiple unit', 30, 39],
    ['regional multiple unit', 30, 39],
    ['block freight', 20, 27],
    ['light engine', 22, 33],
  ];
  return Array.from({ length: perDay * bridges }, (_, index) => {
    const [type, least, most] = random.pick(types);
    // One slot of the day each, so that no two passages of a bridge overlap.
    const slotS = (19 * 3600) / perDay;
    const intoDayS = 5 * 3600 + Math.floor(index / bridges) * slotS + random.uniform(0, slotS - 300);
    return {
      onMicros: day * DAY_MICROS + Math.round(intoDayS * MICROS_PER_SECOND),
      type,
      speedMs: Math.round(random.uniform(least, most) * 100) / 100,
      direction: random.chance(0.5) ? ('rising' as const) : ('falling' as const),
      bridge: index % bridges,
      number: random.integer(0, 499),
    };
  }).sort((a, b) => a.onMicros - b.onMicros);
}

function simulatePast(
  definition: BridgeDefinition,
  event: Extract<SceneEvent, { kind: 'passage' }>,
  { nowMicros, seed }: PastOptions,
): PastPassage | null {
  const parameters = demonstrationParameters(definition, nowMicros);
  const fromMicros = event.onMicros - PAST_BEFORE_S * MICROS_PER_SECOND;
  const lastS = (event.train.axles.at(-1)!.behindFirstM + 100) / event.speedMs;
  const toMicros = event.onMicros + Math.round((lastS + PAST_AFTER_S) * MICROS_PER_SECOND);
  const { channels, truths } = simulate({ definition, parameters, seed, fromMicros, toMicros, events: [event] });
  const truth = truths[0];
  if (truth === undefined) return null;
  const pieces = channels.flatMap((channel) => cutIntoSeconds(channel));
  const blocks = createLoggers(definition).gather(pieces);
  return { bridge: definition.id, definition, blocks, truth };
}

function cutIntoSeconds<T extends { startMicros: Micros; rateHz: number; samples: Float64Array }>(channel: T): T[] {
  const length = Math.max(1, Math.round(channel.rateHz));
  return Array.from({ length: Math.ceil(channel.samples.length / length) }, (_, second) => ({
    ...channel,
    startMicros: channel.startMicros + Math.round((second * length * MICROS_PER_SECOND) / channel.rateHz),
    samples: channel.samples.subarray(second * length, (second + 1) * length),
  }));
}
