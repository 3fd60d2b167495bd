import { execFile } from 'node:child_process';
import { createHash } from 'node:crypto';
import { mkdir, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { setTimeout as sleep } from 'node:timers/promises';
import { promisify } from 'node:util';
import { connectAsync, type MqttClient } from 'mqtt';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { stringify } from 'yaml';
import type { Alarm } from '#core/contract/alarm.ts';
import type { PassagePage, PassageView } from '#core/contract/api.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import { csvHeader, csvRows } from '#core/contract/csv-text.ts';
import { openJournal } from '../../server/ingest/journal.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { samplesPayload } from '../../simulator/payload.ts';
import { simulate } from '../../simulator/scene.ts';
import type { SimulatedChannel } from '../../simulator/simulation.ts';
import { createTrain, type TrainType } from '../../simulator/train.ts';
import { deckSensor, gauge, plainBridge } from '../support/bridges.ts';
import { available } from '../support/debian.ts';
import { freePort, startMosquitto, type Mosquitto } from '../support/mosquitto.ts';
import { createRandom } from '../support/random.ts';
import { blocksOf } from '../support/scenes.ts';
import { ask, ROOT, startServerProcess, temporaryFolder, until, type ServerProcess } from '../support/server.ts';

const KILLS = 25;
const SEED = 20261201;
const SECONDS = 260;
const TRAINS: readonly (readonly [second: number, type: TrainType, speedMs: number])[] = [
  [20, 'light engine', 30],
  [50, 'regional multiple unit', 33],
  [85, 'intercity', 43.8],
  [125, 'block freight', 25],
  [165, 'regional multiple unit', 38],
  [200, 'intercity', 41],
  [235, 'light engine', 22],
];

/** A limit that most trains pass, so that alarms are counted too. */
const BRIDGE: BridgeDefinition = plainBridge({
  sensors: [
    ...['A1', 'A2', 'A3', 'A4'].map((id, i) =>
      deckSensor(id, 4 + 4 * i, { rateHz: 250, acrossM: i % 2 === 0 ? -1 : 1 }),
    ),
    gauge('S1', 0, { rateHz: 250 }),
    gauge('S2', 20, { rateHz: 250 }),
  ],
  limits: [{ ...plainBridge().limits[0]!, levels: { AL: 0.3, IL: 0.8, IAL: 3.5 } }],
});
const TOPIC = `spanbeat/${BRIDGE.id}/L1/samples`;

interface Outcome {
  passages: Passage[];
  waveforms: string[];
  alarms: string[];
}

describe.skipIf(!available('mosquitto'))(`a server that is killed ${KILLS} times in a stream through Mosquitto`, () => {
  let folder: Awaited<ReturnType<typeof temporaryFolder>>;
  let mosquitto: Mosquitto;
  let channels: SimulatedChannel[];
  let payloads: Buffer[];
  let undisturbed: Outcome;
  let killed: Outcome;
  let journaled: Map<string, number>;

  beforeAll(async () => {
    folder = await temporaryFolder('kill');
    await mkdir(join(folder.path, 'bridges'));
    await writeFile(join(folder.path, 'bridges', 'plain.yaml'), stringify(BRIDGE));
    mosquitto = await startMosquitto(['max_queued_messages 0']);
    channels = stream();
    payloads = [...blocksOf(BRIDGE.id, channels, 0.2)].map((block, i) =>
      samplesPayload({
        startMicros: block.startMicros,
        rateHz: block.rateHz,
        sequence: i,
        channels: new Map(block.channels.map(({ sensor, samples }) => [sensor, Float32Array.from(samples)])),
      }),
    );
    undisturbed = await inPeace();
    killed = await underFire();
    journaled = await hashesOfJournal(join(folder.path, 'killed', 'journal'));
  }, 600_000);

  afterAll(async () => {
    await mosquitto.remove();
    await folder.remove();
  });

  /** Starts a server on a data folder of this name; its session at the broker has the same name. */
  async function serve(name: string): Promise<ServerProcess> {
    const words = ['serve', '--bridges', join(folder.path, 'bridges'), '--data', join(folder.path, name)];
    words.push(
      '--broker',
      mosquitto.url,
      '--client-id',
      `test-${name}`,
      '--port',
      String(await freePort()),
      '--log',
      'error',
    );
    return startServerProcess(words);
  }

  const connected = (server: ServerProcess): Promise<unknown> =>
    until('the connection to the broker', async () => {
      const { broker } = await ask<{ broker: { connected: boolean } }>(server, '/api/status');
      return broker.connected;
    });

  async function inPeace(): Promise<Outcome> {
    const server = await serve('peace');
    await connected(server);
    const client = await connectAsync(mosquitto.url);
    await publish(client, payloads);
    await client.endAsync();
    const outcome = await outcomeOf(server);
    await server.interrupt();
    return outcome;
  }

  async function underFire(): Promise<Outcome> {
    const random = createRandom(SEED);
    let server = await serve('killed');
    await connected(server);
    const client = await connectAsync(mosquitto.url);
    const cuts = Array.from({ length: KILLS }, () => random.integer(1, payloads.length - 1)).sort((a, b) => a - b);
    let at = 0;
    for (const cut of cuts) {
      await publish(client, payloads.slice(at, cut));
      at = cut;
      // Somewhere in what follows: while it is taken, written, measured, or already at rest.
      await sleep(random.uniform(0, 400));
      await server.kill();
      server = await serve('killed');
    }
    await publish(client, payloads.slice(at));
    await client.endAsync();
    const outcome = await outcomeOf(server);
    await server.interrupt();
    return outcome;
  }

  it('has something to lose: every train is a passage, most raise an alarm', () => {
    expect(undisturbed.passages).toHaveLength(TRAINS.length);
    expect(undisturbed.alarms.length).toBeGreaterThan(3);
  });

  it('keeps every passage exactly once, each the same to the last bit', () => {
    expect(killed.passages).toEqual(undisturbed.passages);
    expect(killed.waveforms).toEqual(undisturbed.waveforms);
  });

  it('raises every alarm exactly once', () => {
    expect(killed.alarms).toEqual(undisturbed.alarms);
  });

  it('has every block in its journal that the broker was told it had', () => {
    const missing = payloads.filter((payload) => !journaled.has(hash(payload)));
    expect(missing).toHaveLength(0);
  });

  it('agrees with `analyse` on a recording of the same stream, bit for bit', async () => {
    const file = join(folder.path, 'stream.csv');
    const tracks = channels.map(({ sensor, rateHz, startMicros, samples }) => ({
      sensor,
      rateHz,
      runs: [{ startMicros, samples: Float32Array.from(samples) }],
    }));
    await writeFile(file, csvHeader(tracks.map(({ sensor }) => sensor)) + [...csvRows(tracks)].join(''));
    const words = ['server/main.ts', 'analyse', file, '--bridge', join(folder.path, 'bridges', 'plain.yaml')];
    const { stdout } = await promisify(execFile)(process.execPath, words, { cwd: ROOT, maxBuffer: 64e6 });
    const analysed = stdout
      .trim()
      .split('\n')
      .map((line) => JSON.parse(line) as Passage);
    expect(analysed).toEqual(undisturbed.passages);
  }, 120_000);
});

/** Samples as binary32, since that is what goes over the wire. Their times lie in the past, far from "in the future". */
function stream(): SimulatedChannel[] {
  const fromMicros = Math.floor(Date.now() / 1000 - SECONDS - 3600) * 1e6;
  const { channels } = simulate({
    definition: BRIDGE,
    parameters: bridgeParameters(BRIDGE),
    seed: SEED,
    fromMicros,
    toMicros: fromMicros + SECONDS * 1e6,
    events: TRAINS.map(([second, type, speedMs], i) => ({
      kind: 'passage',
      train: createTrain(type, i),
      onMicros: fromMicros + second * 1e6,
      speedMs,
      direction: i % 2 === 0 ? 'rising' : 'falling',
    })),
  });
  return channels.map((channel) => ({ ...channel, samples: Float64Array.from(Float32Array.from(channel.samples)) }));
}

async function publish(client: MqttClient, payloads: readonly Buffer[]): Promise<void> {
  for (const payload of payloads) await client.publishAsync(TOPIC, payload, { qos: 1 });
}

/** What the history holds once all trains have been measured. */
async function outcomeOf(server: ServerProcess): Promise<Outcome> {
  const rows = await until(
    'the last passage',
    async () => {
      const page = await ask<PassagePage>(server, '/api/passages?order=time&limit=100');
      return page.rows.length >= TRAINS.length && page.rows;
    },
    180_000,
  );
  // What might come twice would come now.
  await sleep(1500);
  const page = await ask<PassagePage>(server, '/api/passages?order=time&limit=100');
  expect(page.rows).toHaveLength(rows.length);
  const ids = page.rows.map(({ id }) => id).sort();
  const passages: Passage[] = [];
  const waveforms: string[] = [];
  for (const id of ids) {
    passages.push((await ask<PassageView>(server, `/api/passages/${id}`)).passage);
    const frame = await fetch(new URL(`/api/passages/${id}/waveform`, server.url));
    waveforms.push(hash(Buffer.from(await frame.arrayBuffer())));
  }
  const alarms = await ask<Alarm[]>(server, '/api/alarms?which=all&limit=1000');
  const levels = alarms
    .filter(({ kind }) => kind === 'level')
    .map(({ id, recordValue }) => `${id} ${String(recordValue)}`);
  return { passages, waveforms, alarms: levels.sort() };
}

async function hashesOfJournal(folder: string): Promise<Map<string, number>> {
  const journal = await openJournal(folder, {
    maxBytes: 1e12,
    maxHours: 1e6,
    clock: () => Date.now() * 1000,
    report: () => undefined,
  });
  const seen = new Map<string, number>();
  for await (const { record } of journal.readFrom(null)) {
    const key = hash(record.payload);
    seen.set(key, (seen.get(key) ?? 0) + 1);
  }
  await journal.close();
  return seen;
}

const hash = (bytes: Uint8Array): string => createHash('sha256').update(bytes).digest('hex');
