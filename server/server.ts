import { readFileSync } from 'node:fs';
import { join } from 'node:path';
import type { Alarm } from '#core/contract/alarm.ts';
import { counted } from '#core/contract/counted.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import type { PassageWindow, PipelineOutput } from '#core/contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { readDefinitions } from './bridges.ts';
import type { GivenDefinition } from './definition.ts';
import { RETENTION } from './history/retention.ts';
import { openHistory, type History } from './history/store.ts';
import { decodeMessage } from './ingest/decode.ts';
import { startIngest, type Ingest } from './ingest/ingest.ts';
import { openJournal, type Journal } from './ingest/journal.ts';
import { buildDirectory } from './ingest/topics.ts';
import { joinBackend } from './joined.ts';
import { createLog, type Log } from './log.ts';
import { createPublisher, type Publisher } from './notify/mqtt.ts';
import { startPipelines, type Pipelines } from './pipelines.ts';
import { createComplaintLog, type ComplaintLog } from './report.ts';
import { ingestSettings, type ServerSettings } from './settings.ts';
import { createStages, sharedMs, type Stages } from './stages.ts';
import { createWatch, type BridgeWatch, type WatchEffects } from './watch.ts';
import type { Live } from './web/live.ts';
import { startWeb } from './web/web.ts';

/** A server that runs. */
export interface Running {
  url: string;
  /** Where loggers connect. */
  brokerUrl: string;
  history: History;
  pipelines: Pipelines;
  log: Log;
  /** Stops in order and leaves nothing behind. Idempotent. */
  stop(): Promise<void>;
}

export interface Surroundings {
  clock?: () => Micros;
  /** Since when definitions are in force of bridges that the history does not know; now where absent. */
  firstDefinedMicros?: Micros;
  /** Checks each answer of the interface against its schema; for tests. */
  checkAnswers?: boolean;
  clientFolder?: string;
}

const CLIENT_FOLDER = join(import.meta.dirname, '..', 'client', 'dist');
const DAY_MICROS = 86_400 * MICROS_PER_SECOND;
const TICK_MS = 1_000;
/** Wave forms are thinned this often, for the first time soon after the start. */
const RETENTION_MS = { first: 60_000, then: 3_600_000 };
/** Samples out of the journal are shown where they are no older than the past that pages may ask for. */
const SHOWN_MICROS = 65 * MICROS_PER_SECOND;

const wallClock = (): Micros => Date.now() * 1000;

/**
 * Starts a server: history, journal, pages, pipelines, loggers, in that order. What it has begun is undone where a later
 * step fails.
 *
 * @throws SpanbeatError where the history, a port or a setting cannot be used
 */
export async function startServer(settings: ServerSettings, surroundings: Surroundings = {}): Promise<Running> {
  const begun: (() => Promise<unknown>)[] = [];
  try {
    return await start(settings, surroundings, begun);
  } catch (failure) {
    for (const undo of begun.reverse()) await undo();
    throw failure;
  }
}

async function start(
  settings: ServerSettings,
  surroundings: Surroundings,
  begun: (() => Promise<unknown>)[],
): Promise<Running> {
  const { clock = wallClock } = surroundings;
  const log = createLog(settings.logLevel);
  const complaints = createComplaintLog((complaint) => log.complain(complaint));
  const { report } = complaints;
  const stages = createStages();
  const broker = await ingestSettings(settings.broker);
  if (!broker.ok) throw new SpanbeatError(broker.complaint);
  const { sound, bad } = await readDefinitions(settings.bridges);
  for (const { complaints: all } of bad) all.forEach(report);

  const folder = (name: string): string => join(settings.dataFolder, name);
  const history = await openHistory({
    file: folder('history.duckdb'),
    archiveFolder: folder('archive'),
    clock,
    report,
  });
  begun.push(() => history.close());
  const journal = await openJournal(folder('journal'), { ...settings.journal, clock, report });
  begun.push(() => journal.close());

  const outlets: Outlets = { live: null, publisher: null };
  const watches = await openWatches(sound, history, outlets, surroundings, complaints);
  const definitions = [...watches.values()].map(({ definition, version }) => ({ definition, version }));
  const { directory, complaints: mapping } = buildDirectory(
    sound.map(({ definition }) => definition),
    settings.root,
  );
  mapping.forEach(report);

  let ingest: Ingest | null = null;
  let pipelines: Pipelines | null = null;
  const backend = joinBackend({
    watches,
    bad,
    history,
    complaints,
    clock,
    started: new Date(clock() / 1000).toISOString(),
    broker: () => ingest?.status().broker ?? { kind: settings.broker.kind, connected: false, address: '' },
    journal: () => journal.status(),
    viewers: () => outlets.live?.viewers() ?? 0,
    durations: () => stages.figures(),
    workersHeapBytes: async () => (await pipelines?.heapBytes()) ?? 0,
    retired: (bridge) => retiredWatch(bridge, history, outlets, clock, complaints),
  });
  const web = await startWeb({
    backend,
    clientFolder: surroundings.clientFolder ?? CLIENT_FOLDER,
    host: settings.host,
    port: settings.port,
    allowedOrigins: settings.allowedOrigins,
    channels: definitions.reduce((sum, { definition }) => sum + definition.sensors.length, 0),
    report,
    logger: log.logger,
    version: programVersion(),
    checkAnswers: surroundings.checkAnswers ?? false,
  });
  outlets.live = web.live;
  begun.push(() => web.stop());

  const started = startPipelines({
    bridges: definitions,
    folder: folder('snapshots'),
    journal,
    // What is wrong in it was reported when it came.
    decode: ({ topic, payload, receivedMicros }) =>
      decodeMessage(directory, topic, payload, { nowMicros: receivedMicros }).blocks,
    given: (block, receivedMicros) => watches.get(block.bridge)?.given(block, receivedMicros),
    take: (bridge, output, replayed) =>
      takeOutput(watches.get(bridge)!, output, replayed, { history, live: web.live, clock, stages }),
    remember: (bridge) => watches.get(bridge)!.remember(),
    recall: (bridge, memory) => watches.get(bridge)?.recall(memory),
    report,
    room: () => history.room(),
    stages,
    ...(settings.workers === undefined ? {} : { workers: settings.workers }),
  });
  pipelines = started;
  begun.push(() => started.stop());

  ingest = await startIngest({
    settings: broker.value,
    directory: () => directory,
    journal: withRoom(journal, started, stages),
    clock,
    report,
    onMessage: (blocks, position) => {
      for (const block of blocks) started.feed(block, position);
    },
    // A logger's own word about itself; its silence is noticed by its data.
    onLoggerStatus: ({ bridge, logger, text }) => log.logger.info(`${bridge}/${logger} says "${text.slice(0, 100)}"`),
  });
  const running = ingest;
  begun.push(() => running.stop());
  outlets.publisher = createPublisher({
    root: settings.root,
    publish: ({ topic, payload }) => running.publish(topic, payload),
    published: (alarm) => watches.get(alarm.bridge)?.published(alarm.id),
  });
  const endTimers = startTimers(settings, watches, history, clock, complaints, log);

  let stopping: Promise<void> | null = null;
  return {
    url: web.url,
    brokerUrl: running.status().broker.address,
    history,
    pipelines: started,
    log,
    stop: () =>
      (stopping ??= (async () => {
        endTimers();
        await outlets.publisher?.close();
        await running.stop();
        await started.stop();
        await web.stop();
        await history.close();
        await journal.close();
      })()),
  };
}

/** Where the watches' effects go; filled as the server comes up. */
interface Outlets {
  live: Live | null;
  publisher: Publisher | null;
}

async function openWatches(
  sound: readonly GivenDefinition[],
  history: History,
  outlets: Outlets,
  { clock = wallClock, firstDefinedMicros }: Surroundings,
  complaints: ComplaintLog,
): Promise<Map<string, BridgeWatch>> {
  const last = new Map((await history.lastPassages()).map(({ bridge, id, onMicros }) => [bridge, { id, onMicros }]));
  const watches = new Map<string, BridgeWatch>();
  for (const { definition, text } of sound) {
    const { id } = definition;
    const known = history.versions(id).length > 0;
    const version = await history.saveDefinition(definition, text, (known ? undefined : firstDefinedMicros) ?? clock());
    const newest = last.get(id);
    const [alarms, above] = await Promise.all([
      history.deskAlarms(id),
      history.passagesAbove(id, (newest?.onMicros ?? clock()) - DAY_MICROS),
    ]);
    const effects = effectsOf(history, outlets);
    const { report } = complaints;
    watches.set(
      id,
      createWatch({ definition, version, alarms, above, lastPassage: newest?.id ?? null, clock, effects, report }),
    );
  }
  return watches;
}

/** Pages and neighbours hear of it at once, while the disk is still at work. */
function effectsOf(history: History, outlets: Outlets): WatchEffects {
  const tell = (alarms: readonly Alarm[], publish: boolean): void => {
    for (const alarm of alarms) {
      outlets.live?.alarm(alarm);
      if (publish) outlets.publisher?.alarm(alarm);
    }
  };
  return {
    alarms(alarms, publish) {
      tell(alarms, publish);
      return history.saveAlarms(alarms);
    },
    async passage({ passage, channels }: PassageWindow, alarms, replayed) {
      tell(alarms, true);
      if (!replayed) outlets.live?.passage(passage);
      const { already } = await history.commitPassage({ passage, channels, alarms });
      if (already) return;
      if (replayed) outlets.live?.passage(passage);
      outlets.publisher?.passage(passage);
    },
    noData: (noData) => history.saveNoData(noData),
    health: (bridge, sensors) => outlets.live?.health(bridge, sensors),
  };
}

function retiredWatch(
  bridge: string,
  history: History,
  outlets: Outlets,
  clock: () => Micros,
  { report }: ComplaintLog,
): BridgeWatch | null {
  const newest = history.versions(bridge).at(-1);
  const stored = newest === undefined ? null : history.definitionAt(bridge, newest.version);
  if (stored === null) return null;
  const { definition, version } = stored;
  return createWatch({ definition, version, lastPassage: null, clock, effects: effectsOf(history, outlets), report });
}

function takeOutput(
  watch: BridgeWatch,
  output: PipelineOutput,
  replayed: boolean,
  { history, live, clock, stages }: { history: History; live: Live; clock: () => Micros; stages: Stages },
): Promise<void> | null {
  const cameMs = sharedMs();
  // First what people wait for.
  const kept = watch.take(output, replayed);
  if (output.levels.length > 0 && !replayed) stages.note('tell', sharedMs() - cameMs);
  for (const progress of output.progress) live.progress(progress);
  if (output.axles.length > 0) live.axles(output.axles);
  for (const line of output.spectra) {
    history.addSpectrum(line);
    live.spectrum(line);
  }
  const since = clock() - SHOWN_MICROS;
  live.samples(replayed ? output.live.filter(({ startMicros }) => startMicros >= since) : output.live);
  return kept;
}

/** Acknowledging waits until the message is durable and the pipelines have room, so that a slow machine slows its loggers. */
function withRoom(journal: Journal, pipelines: Pipelines, stages: Stages): Journal {
  return {
    append(record) {
      const cameMs = sharedMs();
      const { position, durable } = journal.append(record);
      const noted = durable.then(() => stages.note('journal', sharedMs() - cameMs));
      return { position, durable: noted.then(() => pipelines.room()) };
    },
    readFrom: (after) => journal.readFrom(after),
    newest: () => journal.newest(),
    status: () => journal.status(),
    close: () => journal.close(),
  };
}

function startTimers(
  { retention }: ServerSettings,
  watches: ReadonlyMap<string, BridgeWatch>,
  history: History,
  clock: () => Micros,
  { report }: ComplaintLog,
  log: Log,
): () => void {
  const ticking = setInterval(() => {
    for (const watch of watches.values()) watch.tick();
  }, TICK_MS);
  let thinning: NodeJS.Timeout;
  const thin = async (): Promise<void> => {
    try {
      const { dropped, bytes, more } = await history.applyRetention({ ...RETENTION, ...retention }, clock());
      if (dropped > 0)
        log.logger.info(`retention thinned ${counted(dropped, 'wave form')}, ${(bytes / 1e6).toFixed(1)} MB`);
      thinning = setTimeout(() => void thin(), more ? TICK_MS : RETENTION_MS.then);
    } catch (failure) {
      report({ code: 'STORE_WRITE', where: 'retention', detail: String(failure) });
      thinning = setTimeout(() => void thin(), RETENTION_MS.then);
    }
    if (ended) clearTimeout(thinning);
  };
  let ended = false;
  thinning = setTimeout(() => void thin(), RETENTION_MS.first);
  return () => {
    ended = true;
    clearInterval(ticking);
    clearTimeout(thinning);
  };
}

function programVersion(): string {
  const text = readFileSync(join(import.meta.dirname, '..', 'package.json'), 'utf8');
  return (JSON.parse(text) as { version: string }).version;
}
