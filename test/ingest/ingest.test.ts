import { connectAsync, type MqttClient } from 'mqtt';
import { afterEach, beforeEach, describe, expect, it } from 'vitest';
import { BLOCK_LIMITS, type SampleBlock } from '#core/contract/block.ts';
import type { Complaint } from '#core/contract/errors.ts';
import { startIngest, type Ingest, type LoggerStatus } from '../../server/ingest/ingest.ts';
import { openJournal, type Journal, type Position } from '../../server/ingest/journal.ts';
import { samplesPayload } from '../../simulator/payload.ts';
import { freePort } from '../support/mosquitto.ts';
import { Disk } from './disk.ts';
import { directoryOf, NOW } from './specimen.ts';

const TOPIC = 'spanbeat/specimen/L1/samples';

let disk: Disk;
let journal: Journal;
let ingest: Ingest;
let complaints: Complaint[];
let given: { blocks: SampleBlock[]; position: Position }[];
let statuses: LoggerStatus[];
let clients: MqttClient[];

beforeEach(async () => {
  disk = new Disk();
  complaints = [];
  given = [];
  statuses = [];
  clients = [];
  const report = (complaint: Complaint): void => void complaints.push(complaint);
  journal = await openJournal('/j', { maxBytes: 1e9, maxHours: 72, clock: () => NOW, report, files: disk });
  const directory = directoryOf();
  ingest = await startIngest({
    settings: { kind: 'embedded', port: await freePort() },
    directory: () => directory,
    journal,
    clock: () => NOW,
    report,
    onMessage: (blocks, position) => void given.push({ blocks, position }),
    onLoggerStatus: (status) => void statuses.push(status),
  });
});

afterEach(async () => {
  await Promise.all(clients.map((one) => one.endAsync(true)));
  await ingest.stop();
  await journal.close();
});

async function logger(options: Parameters<typeof connectAsync>[1] = {}): Promise<MqttClient> {
  const one = await connectAsync(ingest.status().broker.address, { reconnectPeriod: 20, ...options });
  one.on('error', () => undefined);
  clients.push(one);
  return one;
}

/** Samples of two channels, a tenth of a second where not said otherwise; its number tells it from others. */
const message = (number: number, samples = 50): Buffer =>
  samplesPayload({
    startMicros: NOW - 60_000_000 + number * 100_000,
    rateHz: 500,
    sequence: number,
    channels: new Map([
      ['A1', new Float32Array(samples)],
      ['A2', new Float32Array(samples)],
    ]),
  });

const codes = (): string[] => complaints.map(({ code }) => code);

async function until(holds: () => boolean): Promise<void> {
  while (!holds()) await new Promise((resolve) => setTimeout(resolve, 5));
}

async function journaled(): Promise<{ position: Position; topic: string; payload: Buffer }[]> {
  const all = [];
  for await (const { position, record } of journal.readFrom(null)) {
    all.push({ position, topic: record.topic, payload: Buffer.from(record.payload) });
  }
  return all;
}

describe('taking messages in', () => {
  it('hands each message on with the place it has in the journal, in the same order', async () => {
    const [a, b] = [await logger(), await logger()];
    const sending = Array.from({ length: 40 }, (_, i) =>
      (i % 2 === 0 ? a : b).publishAsync(TOPIC, message(i), { qos: 1 }),
    );
    await Promise.all(sending);
    const kept = await journaled();
    const bytes = kept.reduce((sum, { payload }) => sum + payload.length, 0);
    expect(kept).toHaveLength(40);
    expect(given.map(({ position }) => position)).toEqual(kept.map(({ position }) => position));
    expect(kept.map(({ payload }) => payload)).toEqual(given.map(({ blocks }) => message(blocks[0]!.sequence!)));
    expect(ingest.status()).toMatchObject({ messages: 40, refused: 0, notKept: 0, bytes });
    expect(complaints).toEqual([]);
  });

  it('acknowledges what can never be used, counts it, and keeps it out of the journal', async () => {
    const sender = await logger();
    const bad: [string, Buffer, string][] = [
      [TOPIC, Buffer.from([0xff, 0x00]), 'MESSAGE_ENCODING'],
      [TOPIC, message(0).subarray(0, 60), 'MESSAGE_TRUNCATED'],
      [TOPIC, Buffer.alloc(BLOCK_LIMITS.bytes + 1), 'MESSAGE_TOO_LARGE'],
      [TOPIC, Buffer.alloc(10_000, 0x81), 'MESSAGE_DEPTH'],
      ['spanbeat/nowhere/L1/samples', message(0), 'BRIDGE_UNKNOWN'],
      ['spanbeat/specimen/L9/samples', message(0), 'LOGGER_UNKNOWN'],
      ['spanbeat/specimen/L9/status', Buffer.from('online'), 'LOGGER_UNKNOWN'],
      ['elsewhere', message(0), 'MESSAGE_TOPIC'],
    ];
    for (const [topic, payload] of bad) await sender.publishAsync(topic, payload, { qos: 1 });
    expect(codes()).toEqual(bad.map(([, , code]) => code));
    expect(ingest.status()).toMatchObject({ messages: bad.length, refused: bad.length, notKept: 0 });
    expect(given).toEqual([]);
    expect(await journaled()).toEqual([]);
    await sender.publishAsync(TOPIC, message(1), { qos: 1 });
    expect(await journaled()).toHaveLength(1);
    expect(sender.connected).toBe(true);
  });

  it('keeps a message whole of which a part can be used', async () => {
    const sender = await logger();
    const mixed = samplesPayload({
      startMicros: NOW,
      rateHz: 500,
      sequence: 1,
      channels: new Map([
        ['A1', Float32Array.of(1)],
        ['nobody', Float32Array.of(1)],
      ]),
    });
    await sender.publishAsync(TOPIC, mixed, { qos: 1 });
    expect(codes()).toEqual(['SENSOR_UNKNOWN']);
    expect(ingest.status()).toMatchObject({ messages: 1, refused: 0 });
    expect((await journaled()).map(({ payload }) => payload)).toEqual([mixed]);
  });

  it('takes the word of a logger, the newest of it kept for those who come later, and its last will', async () => {
    const topic = 'spanbeat/specimen/L1/status';
    const one = await logger({
      reconnectPeriod: 0,
      will: { topic, payload: Buffer.from('lost'), qos: 1, retain: true },
    });
    await one.publishAsync(topic, `online ${'x'.repeat(5000)}`, { qos: 1, retain: true });
    one.stream.destroy();
    await until(() => statuses.length === 2);
    expect(statuses.map(({ bridge, logger: id, text }) => [bridge, id, text.length])).toEqual([
      ['specimen', 'L1', 1024],
      ['specimen', 'L1', 4],
    ]);
    const late = await logger();
    const heard: string[] = [];
    late.on('message', (_, payload) => void heard.push(payload.toString()));
    await late.subscribeAsync(topic, { qos: 1 });
    await until(() => heard.length > 0);
    expect(heard).toEqual(['lost']);
    expect(await journaled()).toEqual([]);
  });

  it('publishes results, and lets no client do so', async () => {
    const listener = await logger();
    const heard: string[] = [];
    listener.on('message', (topic) => void heard.push(topic));
    await listener.subscribeAsync('spanbeat/#', { qos: 1 });
    await ingest.publish('spanbeat/specimen/alarms', '{}');
    await until(() => heard.length === 1);
    const forger = await logger({ reconnectPeriod: 0 });
    const closed = new Promise<void>((resolve) => forger.once('close', () => resolve()));
    forger.publish('spanbeat/specimen/passages', '{}', { qos: 1 }, () => undefined);
    await closed;
    expect(codes()).toEqual(['CLIENT_REFUSED']);
    await ingest.publish('spanbeat/specimen/passages', '{}');
    await until(() => heard.length === 2);
    expect(heard).toEqual(['spanbeat/specimen/alarms', 'spanbeat/specimen/passages']);
  });
});

describe('a full disk', () => {
  it('lets loggers wait without acknowledgement, is told once, and every message comes in when there is room', async () => {
    const sender = await logger();
    await sender.publishAsync(TOPIC, message(0), { qos: 1 });
    disk.fault = { step: disk.steps + 1, code: 'ENOSPC', forever: true };
    const acknowledged: number[] = [];
    const sending = [1, 2, 3].map((i) =>
      sender.publishAsync(TOPIC, message(i), { qos: 1 }).then(() => acknowledged.push(i)),
    );
    // The logger has come back several times, and it is still full.
    await until(() => ingest.status().notKept >= 6);
    expect(acknowledged).toEqual([]);
    expect(codes()).toEqual(['DISK_FULL']);
    expect(journal.status().full).toBe(true);
    disk.fault = null;
    await Promise.all(sending);
    expect((await journaled()).map(({ payload }) => payload)).toEqual([0, 1, 2, 3].map((i) => message(i)));
    expect(journal.status().full).toBe(false);
  });

  it('that hangs holds up the client that floods it, and costs another neither its place nor its messages', async () => {
    const { promise: written, resolve: goOn } = Promise.withResolvers<undefined>();
    disk.beforeSync = () => written;
    const flood = await logger();
    const flooding = Array.from({ length: 100 }, (_, i) => flood.publishAsync(TOPIC, message(i, 7500), { qos: 1 }));
    await until(() => given.length > 0);
    const quiet = await logger();
    const own = quiet.publishAsync(TOPIC, message(500), { qos: 1 });
    await until(() => given.some(({ blocks }) => blocks[0]!.sequence === 500));
    expect(given.length).toBeLessThan(50);
    goOn(undefined);
    await Promise.all([own, ...flooding]);
    expect(codes()).toEqual([]);
    expect(ingest.status()).toMatchObject({ messages: 101, notKept: 0 });
    expect(await journaled()).toHaveLength(101);
  });
});
