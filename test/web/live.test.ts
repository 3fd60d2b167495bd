import { connect, type Socket } from 'node:net';
import { randomBytes } from 'node:crypto';
import { setTimeout as sleep } from 'node:timers/promises';
import { Value } from 'typebox/value';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { WebSocket } from 'ws';
import type { Complaint } from '#core/contract/errors.ts';
import { decodeFrame, type Frame } from '#core/contract/frame.ts';
import { CLOSE, LIVE_VERSION, ServerMessage, type ViewerMessage } from '#core/contract/live.ts';
import { startWeb, type Web } from '../../server/web/web.ts';
import { aPassage, anAlarm, DAWN } from '../support/specimen.ts';
import { fakeBackend } from './fake-backend.ts';

/** A page, as the client's link would be one. Every message is held against the contract. */
interface Page {
  socket: WebSocket;
  messages: ServerMessage[];
  frames: Frame[];
  closed: Promise<{ code: number; reason: string }>;
  watch(watch: Partial<Extract<ViewerMessage, { type: 'watch' }>>): void;
  until<T>(found: () => T | undefined | false): Promise<T>;
}

const open = new Set<WebSocket>();
let web: Web;
let complaints: Complaint[];

const start = (limits: Parameters<typeof startWeb>[0]['limits'] = {}): Promise<Web> =>
  startWeb({
    backend: fakeBackend(),
    clientFolder: '/nowhere',
    host: '127.0.0.1',
    port: 0,
    channels: 5,
    version: '0',
    report: (complaint) => complaints.push(complaint),
    limits: { flushMs: 10, ...limits },
  });

beforeEach(async () => {
  complaints = [];
  web = await start();
});
afterEach(async () => {
  for (const socket of open) socket.terminate();
  open.clear();
  await web.stop();
});

function page(headers: Record<string, string> = {}): Page {
  const socket = new WebSocket(`${web.url.replace('http', 'ws')}/live`, { headers });
  open.add(socket);
  const messages: ServerMessage[] = [];
  const frames: Frame[] = [];
  socket.on('message', (data: Buffer, binary) => {
    if (binary) {
      frames.push(decodeFrame(new Uint8Array(data), (utf8) => new TextDecoder().decode(utf8)));
      return;
    }
    const message: unknown = JSON.parse(data.toString('utf8'));
    if (!Value.Check(ServerMessage, message)) throw new Error(`not of the contract: ${data.toString('utf8')}`);
    messages.push(message);
  });
  const closed = new Promise<{ code: number; reason: string }>((resolve) =>
    socket.on('close', (code, reason) => resolve({ code, reason: reason.toString() })),
  );
  socket.on('error', () => undefined);
  return {
    socket,
    messages,
    frames,
    closed,
    watch: (watch) =>
      socket.send(JSON.stringify({ type: 'watch', bridge: 'ottermere', columnMicros: 20_000, ...watch })),
    async until(found) {
      for (;;) {
        const value = found();
        if (value !== undefined && value !== false) return value;
        await sleep(2);
      }
    },
  };
}

const ofType = <K extends ServerMessage['type']>({ messages }: Page, type: K): Extract<ServerMessage, { type: K }>[] =>
  messages.filter((message): message is Extract<ServerMessage, { type: K }> => message.type === type);

async function greeted(headers?: Record<string, string>): Promise<Page> {
  const one = page(headers);
  await one.until(() => ofType(one, 'hello')[0]);
  return one;
}

async function watching(watch: Parameters<Page['watch']>[0] = {}): Promise<Page> {
  const one = await greeted();
  one.watch(watch);
  await one.until(() => ofType(one, 'health')[0]);
  return one;
}

/** A second of all five channels at a value. */
const second = (index: number, value: number, sensors = ['A1', 'A2', 'A3', 'A4']): void =>
  web.live.samples(
    sensors.map((sensor) => ({
      bridge: 'ottermere',
      sensor,
      startMicros: DAWN + index * 1_000_000,
      rateHz: 500,
      samples: new Float32Array(500).fill(value),
    })),
  );

describe('the live socket', () => {
  test('greets with version, run, status and open alarms, then gives a sign of life each second', async () => {
    const one = await greeted();
    expect(ofType(one, 'hello')[0]).toMatchObject({ version: LIVE_VERSION, alarms: [{ severity: 'IL' }] });
    await one.until(() => ofType(one, 'status')[0]);
    const other = await greeted();
    expect(ofType(other, 'hello')[0]!.run).toBe(ofType(one, 'hello')[0]!.run);
    expect(web.live.viewers()).toBe(2);
  });

  test('is opened by pages of this server and by programs, and refused to other sites', async () => {
    await greeted({ origin: web.url });
    await greeted();
    const foreign = page({ origin: 'https://elsewhere.example' });
    const answer = await new Promise<{ status: number | undefined; body: string }>((resolve) =>
      foreign.socket.on('unexpected-response', (_, response) => {
        let body = '';
        response.on('data', (part) => (body += String(part)));
        response.on('end', () => resolve({ status: response.statusCode, body }));
      }),
    );
    expect(answer.status).toBe(403);
    expect(JSON.parse(answer.body)).toMatchObject({ code: 'ORIGIN_REFUSED' });
    expect(complaints.map(({ code }) => code)).toEqual(['ORIGIN_REFUSED']);
  });

  test('sends envelopes of the sensors and width that were asked for', async () => {
    const narrow = await watching({ columnMicros: 5_000, sensors: ['A2', 'A1'] });
    const wide = await watching({ columnMicros: 80_000 });
    second(0, 1);
    const first = await narrow.until(() => narrow.frames[0]);
    expect(first.header).toMatchObject({ bridge: 'ottermere', kind: 'live', layout: 'envelope' });
    expect(first.header.channels.map(({ sensor, stepMicros }) => [sensor, stepMicros])).toEqual([
      ['A1', 5_000],
      ['A2', 5_000],
    ]);
    const other = await wide.until(() => wide.frames[0]);
    expect(other.header.channels.map(({ sensor, stepMicros }) => [sensor, stepMicros])).toEqual(
      ['A1', 'A2', 'A3', 'A4'].map((sensor) => [sensor, 80_000]),
    );
    narrow.socket.send(JSON.stringify({ type: 'unwatch' }));
    await sleep(50);
    const before = narrow.frames.length;
    second(1, 2);
    await wide.until(() => wide.frames[1]);
    expect(narrow.frames.length).toBe(before);
  });

  test('sends the past first and then what follows, without hole or overlap', async () => {
    for (let index = 0; index < 20; index++) second(index, index);
    const one = await watching({ pastS: 10 });
    second(20, 20);
    await one.until(() => one.frames.length >= 2);
    const spans = one.frames.flatMap(({ header }) => header.channels.filter(({ sensor }) => sensor === 'A1'));
    for (let i = 1; i < spans.length; i++) {
      const { startMicros, stepMicros, count } = spans[i - 1]!;
      expect(spans[i]!.startMicros).toBe(startMicros + stepMicros * count);
    }
    expect((spans.at(-1)!.startMicros - spans[0]!.startMicros) / 1e6).toBeCloseTo(10, 1);
  });

  test('tells alarms, passages and progress to all, and axles, spectra and health to those who watch the bridge', async () => {
    const watcher = await watching();
    const idle = await greeted();
    const passage = aPassage();
    web.live.alarm(anAlarm(DAWN, 'IAL'));
    web.live.passage(passage);
    web.live.progress({ bridge: 'ottermere', passage: passage.id, kind: 'entered', micros: DAWN });
    const axle = { bridge: 'ottermere', passage: passage.id, sensor: 'A4', micros: DAWN, alongM: 0.5, speedMs: null };
    web.live.axles([axle, { ...axle, micros: DAWN + 60_000, speedMs: 44.4 }]);
    web.live.spectrum({ bridge: 'ottermere', sensor: 'A1', micros: DAWN, stepHz: 0.25, psd: Float32Array.of(1, 2) });
    web.live.health('ottermere', []);
    await watcher.until(() => ofType(watcher, 'health')[1]);
    expect(ofType(watcher, 'axles')[0]!.axles.map(({ speedMs }) => speedMs)).toEqual([null, 44.4]);
    expect(ofType(watcher, 'spectrum')[0]!.psd).toEqual([1, 2]);
    for (const one of [watcher, idle]) {
      expect((await one.until(() => ofType(one, 'alarm')[0])).alarm.severity).toBe('IAL');
      expect((await one.until(() => ofType(one, 'passage')[0])).passage.id).toBe(passage.id);
      await one.until(() => ofType(one, 'progress')[0]);
    }
    await sleep(30);
    expect([...ofType(idle, 'axles'), ...ofType(idle, 'spectrum'), ...ofType(idle, 'health')]).toEqual([]);
  });

  test('tells those who watch a bridge once a second how its sensors are, though nothing comes from them', async () => {
    const watcher = await watching({ sensors: [] });
    const idle = await greeted();
    const told = await watcher.until(() => ofType(watcher, 'health')[2]);
    expect(told).toMatchObject({ bridge: 'ottermere', sensors: fakeBackend().bridge('ottermere')!.sensors });
    expect(watcher.frames).toEqual([]);
    expect(ofType(idle, 'health')).toEqual([]);
  });

  test('answers what it does not understand with a complaint, counts it, and closes after twenty', async () => {
    web.live.close().catch(() => undefined);
    await web.stop();
    web = await start({ messagesPerSecond: 1000 });
    const one = await greeted();
    const nonsense = [
      '',
      'x',
      '{}',
      '{"type":"watch"}',
      '{"type":"watch","bridge":"ottermere","columnMicros":7}',
      '[1]',
    ];
    for (const text of nonsense) one.socket.send(text);
    one.socket.send(Buffer.from([0xff, 0xfe]));
    one.watch({ bridge: 'nowhere' });
    one.socket.send(JSON.stringify({ type: 'watch', bridge: 'ottermere', columnMicros: 5000, pastS: 61 }));
    await one.until(() => ofType(one, 'complaint').length === 9);
    expect(web.live.figures().malformed).toBe(9);
    expect(ofType(one, 'complaint').map(({ code }) => code)).toContain('NOT_FOUND');
    expect(ofType(one, 'complaint').map(({ message }) => message)).toEqual(
      expect.arrayContaining([
        expect.stringContaining('type: found nothing, expected "watch" or "unwatch"'),
        expect.stringContaining('bridge: found nothing, expected a text of at most 64 characters'),
        expect.stringContaining('columnMicros: found 7, expected 5000 or 10000 or 20000 or 40000 or 80000 or 160000'),
        expect.stringContaining('pastS: found 61, expected a number, at least 0, at most 60'),
      ]),
    );
    for (let i = 0; i < 12; i++) one.socket.send('again');
    expect((await one.closed).code).toBe(1008);
    await greeted();
  });

  test('closes a page that sends a message of more than 4 kB, and complains of one that sends too many', async () => {
    const large = await greeted();
    large.socket.send(JSON.stringify({ type: 'watch', bridge: 'x'.repeat(5000), columnMicros: 5000 }));
    expect((await large.closed).code).toBe(1009);
    const busy = await greeted();
    for (let i = 0; i < 60; i++) busy.socket.send(JSON.stringify({ type: 'unwatch' }));
    expect((await busy.closed).code).toBe(1008);
  });

  test('takes up to its limit of viewers; one more is told so and closed, and a place that is left can be taken', async () => {
    await web.stop();
    web = await start({ viewers: 2 });
    const one = await greeted();
    await greeted();
    const third = page();
    expect((await third.closed).code).toBe(CLOSE.tooMany);
    expect(complaints.map(({ code }) => code)).toContain('VIEWERS_TOO_MANY');
    one.socket.close();
    await one.closed;
    await greeted();
  });

  test('says goodbye when the server stops', async () => {
    const one = await greeted();
    await web.stop();
    expect(await one.closed).toMatchObject({ code: CLOSE.shutdown });
  });

  test('answers an upgrade of another path as NOT_FOUND', async () => {
    const socket = new WebSocket(`${web.url.replace('http', 'ws')}/elsewhere`);
    socket.on('error', () => undefined);
    const status = await new Promise((resolve) =>
      socket.on('unexpected-response', (_, response) => resolve(response.statusCode)),
    );
    expect(status).toBe(404);
  });
});

/** A page whose machine has gone to sleep: it takes part in the opening and then reads no more. */
async function sleeper(): Promise<Socket> {
  const { hostname, port } = new URL(web.url);
  const socket = connect(Number(port), hostname);
  socket.on('error', () => undefined);
  const key = randomBytes(16).toString('base64');
  socket.write(
    `GET /live HTTP/1.1\r\nhost: ${hostname}:${port}\r\nupgrade: websocket\r\nconnection: upgrade\r\n` +
      `sec-websocket-key: ${key}\r\nsec-websocket-version: 13\r\n\r\n`,
  );
  await new Promise((resolve) => socket.once('data', resolve));
  socket.write(masked(JSON.stringify({ type: 'watch', bridge: 'ottermere', columnMicros: 5_000 })));
  socket.pause();
  return socket;
}

/** A client's text frame of less than 126 bytes, RFC 6455 section 5.2. */
function masked(text: string): Buffer {
  const payload = Buffer.from(text);
  const mask = Buffer.from([1, 2, 3, 4]);
  const body = payload.map((byte, i) => byte ^ mask[i % 4]!);
  return Buffer.concat([Buffer.from([0x81, 0x80 | payload.length]), mask, body]);
}

/** Signals of 256 channels, so that what the system itself buffers is soon full. */
const MANY = Array.from({ length: 256 }, (_, i) => `S${i}`);

describe('a slow viewer', () => {
  test('misses frames, never holds up the others, and is dropped with its reason after its time', async () => {
    await web.stop();
    web = await start({ slowMs: 300 });
    const quick = await watching({ columnMicros: 5_000 });
    const slow = await sleeper();
    await quick.until(() => web.live.viewers() === 2);
    let heap = 0;
    for (let index = 0; web.live.viewers() === 2; index++) {
      second(index, index, MANY);
      await sleep(12);
      heap = Math.max(heap, process.memoryUsage().arrayBuffers + process.memoryUsage().external);
      expect(index).toBeLessThan(3000);
    }
    expect(web.live.figures()).toMatchObject({ viewersDropped: 1 });
    expect(web.live.figures().framesSkipped).toBeGreaterThan(0);
    expect(complaints.map(({ code }) => code)).toEqual(['VIEWER_SLOW']);
    expect(quick.socket.readyState).toBe(WebSocket.OPEN);
    const before = quick.frames.length;
    second(5000, 1);
    await quick.until(() => quick.frames.length > before);
    slow.destroy();
  });

  test('that wakes in time gets what it missed in wider columns, and the newest of each message it missed', async () => {
    await web.stop();
    web = await start({ slowMs: 60_000, slowBytes: 64 * 1024 });
    const one = await watching({ columnMicros: 5_000 });
    const raw = (one.socket as unknown as { _socket: Socket })._socket;
    raw.pause();
    let index = 0;
    for (; web.live.figures().framesSkipped < 20; index++) {
      second(index, index, MANY);
      await sleep(12);
      expect(index).toBeLessThan(3000);
    }
    for (let n = 0; n < 2000; n++) web.live.alarm(anAlarm(DAWN, n < 1999 ? 'IL' : 'IAL'));
    raw.resume();
    // The alarm came 2000 times; what waited is the newest.
    const alarm = await one.until(() => ofType(one, 'alarm').at(-1));
    expect(alarm.alarm.severity).toBe('IAL');
    expect(ofType(one, 'alarm').length).toBe(1);
    second(index, index, MANY);
    await one.until(() => one.frames.at(-1)!.header.channels[0]!.startMicros >= DAWN + (index - 1) * 1_000_000);
    expect(one.frames.some(({ header }) => header.channels.some(({ stepMicros }) => stepMicros >= 20_000))).toBe(true);
    expect(web.live.figures().viewersDropped).toBe(0);
  });

  test('for which too much would have to be held is dropped at once', async () => {
    await web.stop();
    web = await start({ slowMs: 60_000, slowBytes: 64 * 1024 });
    const one = await watching({ columnMicros: 5_000 });
    (one.socket as unknown as { _socket: Socket })._socket.pause();
    for (let index = 0; web.live.figures().framesSkipped === 0; index++) {
      second(index, index, MANY);
      await sleep(12);
    }
    for (let n = 0; n < 501; n++) web.live.alarm(anAlarm(DAWN + n * 1_000_000));
    expect(web.live.figures().viewersDropped).toBe(1);
    expect(complaints.map(({ code }) => code)).toContain('VIEWER_SLOW');
  });
});
