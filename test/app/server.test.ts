import { spawn } from 'node:child_process';
import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { setTimeout as sleep } from 'node:timers/promises';
import mqtt from 'mqtt';
import { afterEach, beforeAll, beforeEach, describe, expect, test } from 'vitest';
import { WebSocket } from 'ws';
import type { Alarm } from '#core/contract/alarm.ts';
import type { BridgeView, PassagePage, PassageView, Recomputed } from '#core/contract/api.ts';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { decodeFrame } from '#core/contract/frame.ts';
import type { ServerMessage } from '#core/contract/live.ts';
import type { SystemStatus } from '#core/contract/status.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { startServer, type Running } from '../../server/server.ts';
import type { ServerSettings } from '../../server/settings.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { connectLogger } from '../../simulator/publisher.ts';
import { simulate } from '../../simulator/scene.ts';
import { createTrain } from '../../simulator/train.ts';
import { plainBridge } from '../support/bridges.ts';
import { blocksOf, runPipeline } from '../support/scenes.ts';

/** Limits so low that every train is above the intervention limit. */
const definition: BridgeDefinition = plainBridge({
  loggers: [{ id: 'L1', silentAfterS: 5 }],
  limits: [{ ...plainBridge().limits[0]!, levels: { AL: 0.1, IL: 0.25, IAL: 50 } }],
});
/** The stream ends now by the server's clock, which stands still unless a test moves it. */
const NOW: Micros = 1_796_101_953_000_000;
let blocks: SampleBlock[];

beforeAll(() => {
  const events = [25, 65].map((afterS, index) => ({
    kind: 'passage' as const,
    train: createTrain('intercity', index),
    onMicros: NOW - 100 * MICROS_PER_SECOND + afterS * MICROS_PER_SECOND,
    speedMs: 44 - 3 * index,
    direction: 'rising' as const,
  }));
  const { channels } = simulate({
    definition,
    parameters: bridgeParameters(definition),
    seed: 11,
    fromMicros: NOW - 100 * MICROS_PER_SECOND,
    toMicros: NOW,
    events,
  });
  blocks = [...blocksOf(definition.id, channels)];
});

let folder: string;
let clock: Micros;
const running: Running[] = [];

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'server-'));
  clock = NOW;
  // JSON is YAML.
  await writeFile(join(folder, 'plain.yaml'), JSON.stringify(definition));
});
afterEach(async () => {
  for (const one of running.splice(0)) await one.stop();
  await rm(folder, { recursive: true });
});

async function start(over: Partial<ServerSettings> = {}): Promise<Running> {
  const one = await startServer(
    {
      bridges: [folder],
      dataFolder: join(folder, 'data'),
      host: '127.0.0.1',
      port: 0,
      broker: { kind: 'embedded', port: 0 },
      root: 'spanbeat',
      allowedOrigins: [],
      journal: { maxHours: 1, maxBytes: 1e9 },
      retention: {},
      workers: 1,
      logLevel: 'silent',
      ...over,
    },
    { clock: () => clock, checkAnswers: true },
  );
  running.push(one);
  return one;
}

async function json<T>({ url }: Running, path: string): Promise<T> {
  const response = await fetch(url + path);
  if (!response.ok) throw new Error(`${path}: ${response.status} ${await response.text()}`);
  return (await response.json()) as T;
}

/** As fast as the broker takes them. */
async function send(server: Running, some: readonly SampleBlock[]): Promise<void> {
  const logger = await connectLogger({ brokerUrl: server.brokerUrl, root: 'spanbeat', definition, logger: 'L1' });
  for (const block of some) await logger.publish(structuredClone(block));
  await logger.stop();
}

async function until<T>(ask: () => Promise<T | undefined | false>): Promise<T> {
  for (;;) {
    const found = await ask();
    if (found !== undefined && found !== false) return found;
    await sleep(20);
  }
}

const passagesOf = (server: Running, count: number): Promise<PassagePage> =>
  until(async () => {
    const page = await json<PassagePage>(server, '/api/passages');
    return page.total >= count && page;
  });

describe('a server with its own broker', () => {
  test('takes a stream from a logger and shows passages, alarms, wave forms and health of it', async () => {
    const server = await start();
    expect((await json<SystemStatus>(server, '/api/status')).bridges[0]).toMatchObject({ monitoring: 'no data yet' });
    await send(server, blocks);
    const page = await passagesOf(server, 2);
    const direct = runPipeline(
      definition,
      blocks.map((block) => structuredClone(block)),
    );
    // What a logger sends is float32, so the numbers are near those of the samples, not the same.
    expect(page.rows.map(({ axles }) => axles)).toEqual(
      direct.passages.map(({ passage }) => axlesOf(passage)).reverse(),
    );

    const { id } = page.rows[0]!;
    const view = await json<PassageView>(server, `/api/passages/${id}`);
    expect(view).toMatchObject({ hasWaveform: true, earlier: page.rows[1]!.id, later: null });
    expect(view.alarms[0]).toMatchObject({ passage: id, severity: 'IL', verdict: 'confirmed' });
    expect(await json<Recomputed>(server, `/api/passages/${id}/recomputed`)).toMatchObject({ same: true });
    const frame = decodeFrame(
      new Uint8Array(await (await fetch(`${server.url}/api/passages/${id}/waveform`)).arrayBuffer()),
      (bytes) => new TextDecoder().decode(bytes),
    );
    expect(new Set(frame.header.channels.map(({ sensor }) => sensor))).toEqual(
      new Set(definition.sensors.map(({ id: sensor }) => sensor)),
    );
    const bridge = await json<BridgeView>(server, '/api/bridges/plain');
    expect(bridge.status).toMatchObject({ monitoring: 'measuring', channelsAlive: 5, lastPassage: id });
    expect(bridge.sensors[0]).toMatchObject({ sensor: 'A1', samples: 50_000 });
    // 9 f1, see EN 1990 A2.4.4.2.1(4)P.
    expect(bridge.bands).toMatchObject([{ limit: 'deck', upToHz: 45 }]);
    expect(await (await fetch(`${server.url}/api/bridges/plain/definition`)).text()).toBe(JSON.stringify(definition));
  });

  test('pushes alarm and passage to a page and to MQTT, and takes the answer to the alarm', async () => {
    const server = await start();
    const messages: ServerMessage[] = [];
    const socket = new WebSocket(`${server.url.replace('http', 'ws')}/live`);
    socket.on('message', (data: Buffer, binary) => {
      if (!binary) messages.push(JSON.parse(data.toString('utf8')) as ServerMessage);
    });
    await new Promise((resolve) => socket.once('open', resolve));
    const neighbour = await mqtt.connectAsync(server.brokerUrl);
    const heard: string[] = [];
    neighbour.on('message', (topic) => heard.push(topic));
    await neighbour.subscribeAsync('spanbeat/plain/#', { qos: 1 });
    await send(server, blocks.slice(0, 120));
    await passagesOf(server, 1);
    await until(() => Promise.resolve(messages.some(({ type }) => type === 'passage')));
    const types = messages.map(({ type }) => type);
    // The alarm is told while the train is still on the bridge.
    expect(types.indexOf('alarm')).toBeLessThan(types.indexOf('passage'));
    await until(() =>
      Promise.resolve(heard.includes('spanbeat/plain/passages') && heard.includes('spanbeat/plain/alarms')),
    );
    await neighbour.endAsync();

    const [alarm] = await json<Alarm[]>(server, '/api/alarms?which=open');
    const answer = await fetch(`${server.url}/api/alarms/${alarm!.id}/acknowledge`, {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ by: 'M. Ash', note: 'looked at' }),
    });
    expect(answer.status).toBe(200);
    expect(await json<Alarm>(server, `/api/alarms/${alarm!.id}`)).toMatchObject({ acknowledged: { by: 'M. Ash' } });
    socket.close();
  });

  test('keeps everything over a restart and takes up a passage in its middle', async () => {
    const whole = await start({ dataFolder: join(folder, 'whole') });
    await send(whole, blocks);
    const expected = (await passagesOf(whole, 2)).rows.map(({ id }) => id);
    const first = await start();
    await send(first, blocks.slice(0, 52));
    await until(() => Promise.resolve(first.pipelines.figures().blocksInFlight === 0));
    await first.stop();
    const second = await start();
    await send(second, blocks.slice(52));
    const rows = (await passagesOf(second, 2)).rows;
    expect(rows.map(({ id }) => id)).toEqual(expected);
    for (const id of expected) {
      const [a, b] = await Promise.all(
        [whole, second].map(async (server) => (await json<PassageView>(server, `/api/passages/${id}`)).passage),
      );
      expect(b).toEqual(a);
    }
    await second.stop();
    const third = await start();
    expect((await json<PassagePage>(third, '/api/passages')).rows).toEqual(rows);
    expect((await json<SystemStatus>(third, '/api/status')).bridges[0]).toMatchObject({
      monitoring: 'no data',
      lastPassage: expected[0],
    });
  });

  test('announces a logger that falls silent, also one that fell silent while the server was away', async () => {
    const first = await start();
    await send(first, blocks.slice(0, 20));
    await until(async () => (await json<BridgeView>(first, '/api/bridges/plain')).status.monitoring === 'measuring');
    clock += 6 * MICROS_PER_SECOND;
    const silent = await until(async () => (await json<Alarm[]>(first, '/api/alarms?which=open'))[0]);
    expect(silent).toMatchObject({ kind: 'no data', rule: 'L1', severity: 'AL' });
    const view = await json<BridgeView>(first, '/api/bridges/plain');
    expect(view.status).toMatchObject({ monitoring: 'no data', channelsAlive: 0 });
    expect(view.sensors[0]!.active).toMatchObject([{ code: 'silent' }]);
    await first.stop();
    const second = await start();
    await sleep(1200);
    expect(await json<Alarm[]>(second, '/api/alarms?which=all')).toMatchObject([
      { id: silent.id, state: 'unacknowledged' },
    ]);
    await send(second, blocks.slice(20, 40));
    await until(async () => (await json<Alarm>(second, `/api/alarms/${silent.id}`)).state.startsWith('returned'));
  });

  test('lists a bad definition with its complaint and runs the others', async () => {
    await writeFile(join(folder, 'twisted.yaml'), 'spanbeat: 1\nid: twisted\n');
    await writeFile(join(folder, 'tab.yaml'), '\tno yaml');
    const server = await start();
    const { bridges } = await json<SystemStatus>(server, '/api/status');
    expect(bridges.map(({ id, monitoring }) => [id, monitoring])).toEqual([
      ['plain', 'no data yet'],
      ['tab', 'bad definition'],
      ['twisted', 'bad definition'],
    ]);
    expect(bridges[2]!.complaint).toContain('twisted.yaml');
    await send(server, blocks.slice(0, 20));
    await until(async () => (await json<BridgeView>(server, '/api/bridges/plain')).status.monitoring === 'measuring');
  });

  test('counts what it refuses and goes on', async () => {
    const server = await start();
    const client = await mqtt.connectAsync(server.brokerUrl);
    const bad = ['spanbeat/nowhere/L1/samples', 'spanbeat/plain/L9/samples', 'spanbeat/plain/L1/samples'];
    for (const topic of bad) await client.publishAsync(topic, Buffer.from([0xff, 0x00]), { qos: 1 });
    await client.endAsync();
    const { complaints } = await json<SystemStatus>(server, '/api/status');
    expect(complaints).toMatchObject({ BRIDGE_UNKNOWN: 1, LOGGER_UNKNOWN: 1 });
    expect(Object.values(complaints).reduce((sum, count) => sum + count, 0)).toBe(3);
    await send(server, blocks.slice(0, 20));
    await until(async () => (await json<BridgeView>(server, '/api/bridges/plain')).status.monitoring === 'measuring');
  });

  test('stops twice as once, frees its ports and files, and leaves no handle', async () => {
    const handles = (): string[] =>
      process.getActiveResourcesInfo().filter((name) => /TCP|Timeout|Worker|FSReq/.test(name));
    const before = handles();
    const server = await start();
    await send(server, blocks.slice(0, 10));
    await Promise.all([server.stop(), server.stop()]);
    await sleep(50);
    expect(handles().length).toBeLessThanOrEqual(before.length);
    const again = await start({ port: Number(new URL(server.url).port) });
    expect(again.url).toBe(server.url);
  });
});

test('a port in use is said, and nothing is left behind that would lock the history', async () => {
  const other = createServer();
  await new Promise<void>((resolve) => other.listen(0, '127.0.0.1', resolve));
  const { port } = other.address() as { port: number };
  await expect(start({ port })).rejects.toMatchObject({ code: 'PORT_IN_USE' });
  await expect(start({ broker: { kind: 'embedded', port } })).rejects.toMatchObject({ code: 'PORT_IN_USE' });
  await start();
  await new Promise<unknown>((resolve) => other.close(resolve));
});

test('a second server on the same folder is refused, and ends', async () => {
  await start();
  const words = ['serve', '--bridges', folder, '--data', join(folder, 'data'), '--port', '0'];
  const main = new URL('../../server/main.ts', import.meta.url).pathname;
  const second = spawn(process.execPath, [main, ...words], { stdio: ['ignore', 'ignore', 'pipe'] });
  let told = '';
  second.stderr.on('data', (part) => (told += String(part)));
  const code = await new Promise((resolve) => second.once('close', resolve));
  expect(told).toContain('STORE_LOCKED');
  expect(code).toBe(3);
});

test('an outside broker that is down does not keep the server from starting', async () => {
  const server = await start({ broker: { kind: 'outside', url: 'mqtt://127.0.0.1:1', clientId: 'test' } });
  const status = await until(async () => {
    const now = await json<SystemStatus>(server, '/api/status');
    return Object.keys(now.complaints).length > 0 && now;
  });
  expect(status.broker).toMatchObject({ kind: 'outside', connected: false });
  expect(status.complaints).toMatchObject({ BROKER_UNREACHABLE: expect.any(Number) as unknown });
});

function axlesOf({ axleCount }: { axleCount: { value: number | null } }): number | null {
  return axleCount.value;
}
