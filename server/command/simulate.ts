import { open, writeFile } from 'node:fs/promises';
import { setTimeout as sleep } from 'node:timers/promises';
import type { SampleBlock } from '#core/contract/block.ts';
import { bridgeLengthM, type BridgeDefinition } from '#core/contract/bridge.ts';
import { counted } from '#core/contract/counted.ts';
import { csvHeader, csvRows } from '#core/contract/csv-text.ts';
import { SpanbeatError, type Complaint } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';
import { createFaultyLogger, drawFaults, type FaultyLogger } from '../../simulator/faults.ts';
import { createLoggers } from '../../simulator/logger.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { offMicros, type PassageEvent } from '../../simulator/passage.ts';
import { senmlPayload } from '../../simulator/payload.ts';
import { connectLogger, type LoggerPublisher } from '../../simulator/publisher.ts';
import { RandomStream } from '../../simulator/random.ts';
import { createBridgeSimulation } from '../../simulator/simulation.ts';
import { createTrain, TRAIN_TYPES, type TrainType } from '../../simulator/train.ts';
import type { PassageTruth } from '../../simulator/truth.ts';
import { readDefinition } from '../definition.ts';
import { definitionFile } from './definition-file.ts';
import { complain, complainOf, EXIT, type Console } from './outcome.ts';

export interface SimulateSettings {
  /** Definition file, or id of a bridge of the demonstration. */
  bridge: string;
  train: TrainType | 'mixed';
  /** Passages. */
  count: number;
  seed: number;
  /** Speed of all trains, m/s; by the type of train where null. */
  speedMs: number | null;
  direction: 'rising' | 'falling' | 'both';
  /** File, `-` for standard output, or an MQTT address. */
  to: string;
  /** What goes into a file: CSV, or a SenML pack a line, each line a message that a logger would send. */
  as: 'csv' | 'senml';
  /** Of SenML: the only logger that is written; the topic that the packs go to names one. Null: the bridge has no other. */
  logger: string | null;
  /** First level of the topics. */
  root: string;
  username?: string | undefined;
  password?: string | undefined;
  /** Keep pace with the clock; else as fast as the receiver takes it. */
  realTime: boolean;
  startMicros: Micros | null;
  /** Let each logger have a bad day: a gap, a block twice, one late, a restart, a clock that is off. */
  faults: boolean;
  /** File for the truth; beside a CSV file where null. */
  truth: string | null;
}

/** Quiet before the first train, and from the last axle of one to the first of the next, s. */
const BEFORE_S = 20;
const BETWEEN_S = 30;
/** Samples are made in stretches of this length, s. */
const STRETCH_S = { fast: 1, realTime: 0.2 } as const;
/** Beginning of a simulated CSV where none is given: so that the same command gives the same file. */
const DEFAULT_START_MICROS: Micros = 1_798_787_700 * MICROS_PER_SECOND;

const SPEEDS_MS: Readonly<Record<TrainType, readonly [number, number]>> = {
  intercity: [40, 44.4],
  'regional multiple unit': [30, 39],
  'block freight': [20, 27],
  'light engine': [22, 33],
  'tamping machine': [17, 25],
};

/** Where simulated blocks go. */
interface Sink {
  take(blocks: readonly SampleBlock[]): Promise<void>;
  close(): Promise<void>;
}

/** `simulate`: trains over a bridge, to a file or a broker, with the truth beside. @returns exit code */
export async function simulate(settings: SimulateSettings, console: Console): Promise<number> {
  const reading = await readDefinition(definitionFile(settings.bridge));
  if (!reading.ok) return complain(reading.complaints, console);
  const { definition } = reading.value;
  const unclear = loggerComplaint(definition, settings);
  if (unclear !== null) return complain([unclear], console);
  try {
    const sink = await openSink(definition, settings, console);
    const truths = await run(definition, settings, sink);
    await writeTruth(definition, settings, truths, console);
    return EXIT.good;
  } catch (error) {
    return complainOf(error, console);
  }
}

/** SenML packs do not say of which logger they are. */
function loggerComplaint({ loggers }: BridgeDefinition, { as, to, logger }: SimulateSettings): Complaint | null {
  if (as !== 'senml' || isMqtt(to)) return null;
  const known = loggers.map(({ id }) => id);
  if (logger === null ? known.length === 1 : known.includes(logger)) return null;
  return { code: 'USAGE', where: '--logger', detail: `${logger ?? 'none'} given, the bridge has ${known.join(', ')}` };
}

function openSink(definition: BridgeDefinition, settings: SimulateSettings, console: Console): Promise<Sink> {
  const { to, as, logger } = settings;
  if (isMqtt(to)) return mqttSink(definition, settings, console);
  if (as === 'csv') return csvSink(definition, to, console);
  return senmlSink(definition, logger ?? definition.loggers[0]!.id, to, console);
}

const isMqtt = (to: string): boolean => /^(mqtts?|tcp|ssl|tls|wss?):\/\//.test(to);

async function run(definition: BridgeDefinition, settings: SimulateSettings, sink: Sink): Promise<PassageTruth[]> {
  const { events, lengthS } = plan(definition, settings);
  const startMicros = startOf(settings, lengthS);
  const parameters = bridgeParameters(definition);
  const simulation = createBridgeSimulation({ definition, parameters, seed: settings.seed, startMicros });
  const loggers = createLoggers(definition);
  const faulty = settings.faults ? faultyLoggers(definition, settings.seed, startMicros, lengthS) : null;
  const stretchS = settings.realTime ? STRETCH_S.realTime : STRETCH_S.fast;
  const begun = performance.now();
  const truths: PassageTruth[] = [];
  const waiting = events.map((event) => ({ ...event, onMicros: event.onMicros + startMicros }));
  try {
    for (let stretch = 1; (stretch - 1) * stretchS < lengthS; stretch++) {
      const toMicros = startMicros + Math.round(stretch * stretchS * MICROS_PER_SECOND);
      // An hour ahead is early enough; thousands of events at once would be looked through again and again.
      while (waiting[0] !== undefined && waiting[0].onMicros < toMicros + 3600 * MICROS_PER_SECOND) {
        simulation.schedule(waiting.shift()!);
      }
      const sent = loggers.gather(simulation.advance(toMicros));
      await sink.take(faulty === null ? sent : sent.flatMap((block) => faulty.get(block.logger)?.pass(block) ?? []));
      truths.push(...simulation.takeTruths());
      if (settings.realTime) await sleep(Math.max(0, stretch * stretchS * 1000 - (performance.now() - begun)));
    }
    await sink.take([...(faulty?.values() ?? [])].flatMap((logger) => logger.end()));
  } finally {
    await sink.close();
  }
  return truths;
}

function faultyLoggers(
  definition: BridgeDefinition,
  seed: number,
  startMicros: Micros,
  lengthS: number,
): Map<string, FaultyLogger> {
  return new Map(
    definition.loggers.map(({ id }) => {
      const random = new RandomStream(seed, `faults/${id}`);
      const toMicros = startMicros + lengthS * MICROS_PER_SECOND;
      return [id, createFaultyLogger(drawFaults(random, startMicros, toMicros))];
    }),
  );
}

/** The trains, with times from the beginning, and how long all of it takes. */
function plan(
  definition: BridgeDefinition,
  { train, count, seed, speedMs, direction }: SimulateSettings,
): { events: PassageEvent[]; lengthS: number } {
  const random = new RandomStream(seed, 'simulate');
  const events: PassageEvent[] = [];
  let onS = BEFORE_S;
  for (let number = 0; number < count; number++) {
    const type = train === 'mixed' ? random.pick(TRAIN_TYPES) : train;
    const drawn = Math.round(random.uniform(...SPEEDS_MS[type]) * 100) / 100;
    const way = random.chance(0.5) ? 'rising' : 'falling';
    const event: PassageEvent = {
      kind: 'passage',
      train: createTrain(type, seed * 1000 + number),
      onMicros: Math.round(onS * MICROS_PER_SECOND),
      speedMs: speedMs ?? drawn,
      direction: direction === 'both' ? way : direction,
    };
    events.push(event);
    onS = offMicros(event, bridgeLengthM(definition)) / MICROS_PER_SECOND + BETWEEN_S;
  }
  return { events, lengthS: Math.ceil(onS) };
}

function startOf({ startMicros, to, as, realTime }: SimulateSettings, lengthS: number): Micros {
  if (startMicros !== null) return startMicros;
  if (!isMqtt(to) && as === 'csv') return DEFAULT_START_MICROS;
  const nowS = Math.floor(Date.now() / 1000);
  // A server believes no time ahead of its clock, so what is sent fast lies in the past.
  return (realTime ? nowS : nowS - lengthS) * MICROS_PER_SECOND;
}

/** Where lines go. */
interface Output {
  write(text: string): Promise<void>;
  close(): Promise<void>;
}

async function openOutput(file: string, console: Console): Promise<Output> {
  if (file === '-') return { write: (text) => console.out(text), close: () => Promise.resolve() };
  const handle = await open(file, 'w').catch((error: unknown) => Promise.reject(unwritable(file, error)));
  return {
    async write(text) {
      await handle.write(text).catch((error: unknown) => Promise.reject(unwritable(file, error)));
    },
    close: () => handle.close(),
  };
}

async function csvSink(definition: BridgeDefinition, file: string, console: Console): Promise<Sink> {
  const ids = definition.sensors.map(({ id }) => id);
  const output = await openOutput(file, console);
  await output.write(csvHeader(ids));
  return {
    async take(blocks) {
      const tracks = definition.sensors.map(({ id, rateHz }) => ({
        sensor: id,
        rateHz,
        runs: blocks.flatMap(({ startMicros, channels }) =>
          channels.filter(({ sensor }) => sensor === id).map(({ samples }) => ({ startMicros, samples })),
        ),
      }));
      for (const rows of csvRows(tracks)) await output.write(rows);
    },
    close: () => output.close(),
  };
}

/** A pack a block (RFC 8428, JSON), in the sensors' own units and names; the logger is told by the topic it is sent to. */
async function senmlSink(definition: BridgeDefinition, logger: string, file: string, console: Console): Promise<Sink> {
  const units = new Map(definition.sensors.map(({ id, unit }) => [id, unit]));
  const output = await openOutput(file, console);
  return {
    async take(blocks) {
      for (const { startMicros, rateHz, channels } of blocks.filter((block) => block.logger === logger)) {
        const readings = channels.flatMap(({ sensor, samples }) =>
          Array.from(samples, (value, index) => ({
            name: sensor,
            unit: units.get(sensor) ?? '',
            // Six digits are finer than any logger's converter.
            value: Number(value.toPrecision(6)),
            micros: sampleMicros(startMicros, index, rateHz),
          })),
        );
        await output.write(`${senmlPayload(readings).toString()}\n`);
      }
    },
    close: () => output.close(),
  };
}

async function mqttSink(definition: BridgeDefinition, settings: SimulateSettings, console: Console): Promise<Sink> {
  const { to, root, username, password } = settings;
  const publishers = new Map<string, LoggerPublisher>();
  try {
    for (const { id } of definition.loggers) {
      const onTrouble = (reason: string): void => console.err(`note: ${id}: ${reason}\n`);
      const options = { brokerUrl: to, root, definition, logger: id, username, password, onTrouble };
      publishers.set(id, await connectLogger(options));
    }
  } catch (error) {
    const refused = error instanceof Error && 'code' in error && typeof error.code === 'number';
    const detail = error instanceof Error && error.message !== '' ? error.message : String(error);
    throw new SpanbeatError({ code: refused ? 'BROKER_REFUSED' : 'BROKER_UNREACHABLE', where: to, detail });
  }
  return {
    async take(blocks) {
      for (const block of blocks) await publishers.get(block.logger)?.publish(block);
    },
    async close() {
      for (const publisher of publishers.values()) await publisher.stop();
    },
  };
}

async function writeTruth(
  definition: BridgeDefinition,
  { to, truth, seed }: SimulateSettings,
  truths: readonly PassageTruth[],
  console: Console,
): Promise<void> {
  const beside = to === '-' || isMqtt(to) ? null : `${to.replace(/\.csv$/i, '')}.truth.json`;
  const file = truth ?? beside;
  if (file === null) return;
  const content = { bridge: definition.id, seed, parameters: bridgeParameters(definition), passages: truths };
  try {
    await writeFile(file, `${JSON.stringify(content, null, 2)}\n`);
  } catch (error) {
    throw unwritable(file, error);
  }
  console.err(`note: the truth of ${counted(truths.length, 'passage')} is in ${file}\n`);
}

function unwritable(file: string, error: unknown): SpanbeatError {
  const full = error instanceof Error && 'code' in error && error.code === 'ENOSPC';
  const detail = error instanceof Error ? error.message : String(error);
  return new SpanbeatError({ code: full ? 'DISK_FULL' : 'FILE_UNWRITABLE', where: file, detail });
}
