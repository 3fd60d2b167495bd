import { readFile, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { Worker } from 'node:worker_threads';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { counted } from '#core/contract/counted.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { DEMONSTRATION_FILES, pastFromMicros } from '../simulator/demonstration.ts';
import { readDefinitions } from './bridges.ts';
import type { FromPast, PastWork } from './demonstration-past.ts';
import type { TrafficWork } from './demonstration-traffic.ts';
import type { History } from './history/store.ts';
import { startServer, type Running } from './server.ts';
import type { DemonstrationSettings, ServerSettings } from './settings.ts';
import { stopOnSignal } from './signal.ts';

/** First level of the demonstration's topics. */
const ROOT = 'spanbeat';
/** The past is made after the first trains of the present have been seen. */
const PAST_AFTER_MS = 20_000;

/**
 * The demonstration: a server with a broker of its own on a free port, three invented bridges, and simulated loggers under
 * simulated traffic in a thread. What it recorded stays for the next start; the first start also makes a measured past.
 */
export async function demonstration(settings: DemonstrationSettings): Promise<Running> {
  const { dataFolder, host, port, seed, logLevel } = settings;
  const files = DEMONSTRATION_FILES.map((file) => fileURLToPath(file));
  const progress = await readProgress(settings);
  const serverSettings: ServerSettings = {
    bridges: files,
    dataFolder,
    host,
    port,
    broker: { kind: 'embedded', port: 0 },
    root: ROOT,
    allowedOrigins: [],
    journal: { maxHours: 6, maxBytes: 1e9 },
    retention: {},
    logLevel,
  };
  // The past was measured under definitions that were in force.
  const firstDefinedMicros = pastFromMicros(progress.nowMicros, progress.days);
  const server = await startServer(serverSettings, progress.days > 0 ? { firstDefinedMicros } : {});
  const { sound } = await readDefinitions(files);
  const definitions = sound.map(({ definition }) => definition);
  const traffic: TrafficWork = { brokerUrl: server.brokerUrl, root: ROOT, seed, definitions };
  const loggers = startThread('demonstration-traffic.ts', traffic, server);
  const past = startPast(settings, progress, server, definitions);

  let stopping: Promise<void> | null = null;
  const running: Running = {
    ...server,
    stop: () =>
      (stopping ??= (async () => {
        await Promise.all([endThread(loggers), past.stop()]);
        await server.stop();
      })()),
  };
  stopOnSignal(() => running.stop());
  process.stdout.write(welcome(server, settings, progress));
  return running;
}

function welcome(
  { url, brokerUrl }: Running,
  { dataFolder }: DemonstrationSettings,
  { days, finished }: PastProgress,
): string {
  return `
  Spanbeat demonstration      ${url}

  Three invented bridges under invented trains; ${brokerUrl} takes the samples.
  After some 12 s a regional train crosses Ottermere Trough; after some 40 s an intercity at line speed,
  which shakes it above its intervention limit and raises an alarm. Trains go on from there.
  ${finished ? '' : `A past of ${counted(days, 'day')} is measured in the background, from ${PAST_AFTER_MS / 1000} s on.`}
  What is recorded stays in ${dataFolder} for the next start. Ctrl-C ends it.
  Advisory only: no authority over train movement.

`;
}

function startThread(file: string, workerData: unknown, { log }: Running): Worker {
  const worker = new Worker(new URL(file, import.meta.url), { workerData, execArgv: [] });
  worker.on('error', (failure) => log.logger.error(failure, `${file} failed`));
  return worker;
}

/** Asks a thread to end, and cuts it where it does not. */
async function endThread(worker: Worker): Promise<void> {
  const ended = new Promise<void>((resolve) => worker.once('exit', () => resolve()));
  worker.postMessage('stop');
  const cut = setTimeout(() => void worker.terminate(), 2_000);
  await ended;
  clearTimeout(cut);
}

/** How far the past has been made; it goes on there after a restart. */
interface PastProgress {
  /** The first start, where the past ends and the present begins, and how many days before it were wanted then. */
  nowMicros: Micros;
  days: number;
  done: number;
  finished: boolean;
}

function startPast(
  { dataFolder, seed }: DemonstrationSettings,
  progress: PastProgress,
  server: Running,
  definitions: readonly BridgeDefinition[],
): { stop(): Promise<void> } {
  const file = progressFile(dataFolder);
  const { history } = server;
  let worker: Worker | null = null;
  const trouble = (failure: unknown): void => server.log.logger.error(failure, 'the measured past stops here');
  let last: Promise<void> = writeFile(file, JSON.stringify(progress)).catch(trouble);
  const begin = (): void => {
    if (progress.finished || progress.days === 0) return;
    // The first of each bridge was in force then.
    const first = definitions.flatMap(({ id }) => history.definitionAt(id, 1) ?? []);
    const work: PastWork = {
      definitions: first.map(({ definition }) => definition),
      versions: first.map(({ version }) => version),
      seed,
      days: progress.days,
      nowMicros: progress.nowMicros,
      skip: progress.done,
    };
    worker = startThread('demonstration-past.ts', work, server);
    worker.on('message', (message: FromPast) => {
      last = last.then(() => keepPast(message, history, progress, file)).catch(trouble);
    });
  };
  const timer = setTimeout(begin, PAST_AFTER_MS);
  return {
    async stop() {
      clearTimeout(timer);
      await last;
      if (worker !== null) await endThread(worker);
      await last;
    },
  };
}

async function keepPast(message: FromPast, history: History, progress: PastProgress, file: string): Promise<void> {
  if (message.kind === 'passage') {
    for (const { window, alarms } of message.found) {
      await history.commitPassage({ passage: window.passage, channels: window.channels, alarms });
    }
    progress.done += 1;
  } else progress.finished = true;
  await writeFile(file, JSON.stringify(progress));
}

/** On the first start there is none yet: the past ends where the present begins. */
async function readProgress({ dataFolder, pastDays }: DemonstrationSettings): Promise<PastProgress> {
  const nowMicros = Math.floor(Date.now() / 1000) * MICROS_PER_SECOND;
  const first: PastProgress = { nowMicros, days: pastDays, done: 0, finished: pastDays === 0 };
  try {
    const known = JSON.parse(await readFile(progressFile(dataFolder), 'utf8')) as Partial<PastProgress>;
    return { ...first, ...known };
  } catch {
    return first;
  }
}

const progressFile = (dataFolder: string): string => join(dataFolder, 'past.json');
