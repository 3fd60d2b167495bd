import { mkdir, readFile, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { Worker } from 'node:worker_threads';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { DEMONSTRATION_FILES } from '../simulator/demonstration.ts';

import { readDefinitions } from './bridges.ts';
import type { FromPast, PastWork } from './demonstration-past.ts';
import type { TrafficWork } from './demonstration-traffic.ts';
import type { History } from './history/store.ts';
import { startServer, type Running } from './server.ts';
import type { DemonstrationSettings } from './settings.ts';
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
  const server = await startServer({
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
  });
  const { sound } = await readDefinitions(files);
  const definitions = sound.map(({ definition }) => definition);
  const traffic: TrafficWork = { brokerUrl: server.brokerUrl, root: ROOT, seed, definitions };
  const loggers = startThread('demonstration-traffic.ts', traffic, server);
  const past = startPast(settings, server);

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
  process.stdout.write(welcome(server, settings));
  return running;
}

function welcome({ url, brokerUrl }: Running, { pastDays, dataFolder }: DemonstrationSettings): string {
  return `
  Spanbeat demonstration      ${url}

  Three invented bridges under invented trains; ${brokerUrl} takes the samples.
  After some 12 s a regional train crosses Ottermere Trough; after some 40 s an intercity at line speed,
  which shakes it above its intervention limit and raises an alarm. Trains go on from there.
  ${pastDays > 0 ? `A past of ${pastDays} days is measured in the background on the first start, from ${PAST_AFTER_MS / 1000} s on.` : ''}
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
  nowMicros: Micros;
  done: number;
  finished: boolean;
}

function startPast({ dataFolder, seed, pastDays }: DemonstrationSettings, server: Running): { stop(): Promise<void> } {
  const file = join(dataFolder, 'past.json');
  let worker: Worker | null = null;
  let last: Promise<void> = Promise.resolve();
  const begin = async (): Promise<void> => {
    const progress = await readProgress(file);
    if (pastDays === 0 || progress.finished) return;
    const { sound } = await readDefinitions(DEMONSTRATION_FILES.map((one) => fileURLToPath(one)));
    const work: PastWork = {
      definitions: sound.map(({ definition }) => definition),
      versions: sound.map(({ definition }) => server.history.versions(definition.id).at(-1)?.version ?? 1),
      seed,
      days: pastDays,
      nowMicros: progress.nowMicros,
      skip: progress.done,
    };
    worker = startThread('demonstration-past.ts', work, server);
    worker.on('message', (message: FromPast) => {
      last = last
        .then(() => keepPast(message, server.history, progress, file))
        .catch((failure: unknown) => server.log.logger.error(failure, 'the measured past stops here'));
    });
  };
  const timer = setTimeout(() => {
    last = begin();
  }, PAST_AFTER_MS);
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
  await mkdir(join(file, '..'), { recursive: true });
  await writeFile(file, JSON.stringify(progress));
}

async function readProgress(file: string): Promise<PastProgress> {
  try {
    return JSON.parse(await readFile(file, 'utf8')) as PastProgress;
  } catch {
    // The first start: there is none yet. The past ends where the present begins.
    return { nowMicros: Math.floor(Date.now() / 1000) * MICROS_PER_SECOND, done: 0, finished: false };
  }
}
