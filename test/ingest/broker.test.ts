import { connect as connectTcp } from 'node:net';
import { once } from 'node:events';
import { connectAsync, type MqttClient } from 'mqtt';
import { afterEach, beforeEach, describe, expect, it } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { startBroker } from '../../server/ingest/broker.ts';
import type { Incoming, Link } from '../../server/ingest/link.ts';
import { freePort } from '../support/mosquitto.ts';

/** A broker whose `take` does what the test wants. */
let take: (message: Incoming) => Promise<void>;
let taken: Incoming[];
let complaints: Complaint[];
let broker: Link;
let url: string;
let clients: MqttClient[];

beforeEach(async () => {
  taken = [];
  complaints = [];
  clients = [];
  take = () => Promise.resolve();
  broker = await startBroker({
    settings: { kind: 'embedded', port: await freePort() },
    take: (message) => {
      taken.push(message);
      return take(message);
    },
    isReserved: (topic) => topic.endsWith('/alarms'),
    isRetained: (topic) => topic.endsWith('/status'),
    report: (complaint) => void complaints.push(complaint),
  });
  url = broker.status().address;
});

afterEach(async () => {
  await Promise.all(clients.map((client) => client.endAsync(true)));
  await broker.stop();
});

async function client(options: Parameters<typeof connectAsync>[1] = {}): Promise<MqttClient> {
  const connected = await connectAsync(url, { reconnectPeriod: 20, ...options });
  connected.on('error', () => undefined);
  clients.push(connected);
  return connected;
}

const codes = (): string[] => complaints.map(({ code }) => code);

const closing = (sender: MqttClient): Promise<void> => new Promise((resolve) => sender.once('close', resolve));

async function until(holds: () => boolean): Promise<void> {
  while (!holds()) await new Promise((resolve) => setTimeout(resolve, 5));
}

describe('the embedded broker', () => {
  it('acknowledges a message only once it is durable, while others are served', async () => {
    const { promise: durable, resolve: written } = Promise.withResolvers<undefined>();
    take = ({ topic }) => (topic === 'slow' ? durable : Promise.resolve());
    const [slow, quick] = [await client(), await client()];
    let acknowledged = false;
    const publishing = slow.publishAsync('slow', 'x', { qos: 1 }).then(() => (acknowledged = true));
    await until(() => taken.length === 1);
    // Many round trips of another client: whatever was going to be acknowledged has been.
    for (let i = 0; i < 50; i++) await quick.publishAsync('quick', 'x', { qos: 1 });
    expect(acknowledged).toBe(false);
    written(undefined);
    await publishing;
    expect(acknowledged).toBe(true);
  });

  it('drops a client whose message could not be kept, so that it comes again', async () => {
    let tries = 0;
    take = () =>
      ++tries < 3
        ? Promise.reject(new SpanbeatError({ code: 'DISK_FULL', detail: 'told to fail' }))
        : Promise.resolve();
    const sender = await client();
    await sender.publishAsync('t', 'again', { qos: 1 });
    expect(taken.map(({ payload }) => Buffer.from(payload).toString())).toEqual(['again', 'again', 'again']);
  });

  it('says that its port is in use, and where', async () => {
    const port = Number(new URL(url).port);
    const second = startBroker({
      settings: { kind: 'embedded', port },
      take: () => Promise.resolve(),
      isReserved: () => false,
      isRetained: () => false,
      report: () => undefined,
    });
    await expect(second).rejects.toMatchObject({ code: 'PORT_IN_USE' });
    await expect(second).rejects.toThrow(String(port));
  });

  it('drops a client that sends a packet larger than a block may be, before all of it has come', async () => {
    const good = await client();
    const socket = connectTcp(Number(new URL(url).port), '127.0.0.1');
    await once(socket, 'connect');
    // PUBLISH of 200 MB: its header is enough.
    socket.write(Buffer.from([0x30, 0x80, 0x84, 0xaf, 0x5f, 0, 1, 0x74]));
    await once(socket, 'close');
    expect(codes()).toContain('MESSAGE_TOO_LARGE');
    await good.publishAsync('t', Buffer.alloc(BLOCK_LIMITS.bytes), { qos: 1 });
    expect(taken).toHaveLength(1);
  });

  it('drops a client that does not speak MQTT, and no other', async () => {
    const good = await client();
    for (const bytes of [Buffer.from('GET / HTTP/1.1\r\n\r\n'), Buffer.alloc(64, 0xff), Buffer.alloc(3)]) {
      const socket = connectTcp(Number(new URL(url).port), '127.0.0.1');
      socket.on('error', () => undefined);
      await once(socket, 'connect');
      socket.end(bytes);
      socket.resume();
      await once(socket, 'close');
    }
    expect(new Set(codes())).toEqual(new Set(['MESSAGE_ENCODING', 'CLIENT_REFUSED']));
    await good.publishAsync('t', 'x', { qos: 1 });
    expect(taken).toHaveLength(1);
  });

  it('lets nobody else publish alarms', async () => {
    const sender = await client({ reconnectPeriod: 0 });
    const closed = closing(sender);
    sender.publish('spanbeat/b/alarms', '{}', { qos: 1 }, () => undefined);
    await closed;
    expect(taken).toEqual([]);
    expect(complaints.at(-1)).toMatchObject({ code: 'CLIENT_REFUSED' });
    expect(complaints.at(-1)?.detail).toContain('spanbeat/b/alarms');
  });

  it('tells subscribers what the server publishes, and keeps retained messages of loggers only where they are a status', async () => {
    const sender = await client();
    await sender.publishAsync('b/L1/status', 'online', { qos: 1, retain: true });
    await sender.publishAsync('b/L1/samples', 'x', { qos: 1, retain: true });
    const listener = await client();
    const heard: string[] = [];
    listener.on('message', (topic, payload) => void heard.push(`${topic} ${payload.toString()}`));
    await listener.subscribeAsync('#', { qos: 1 });
    await broker.publish('b/passages', 'one');
    await until(() => heard.length >= 2);
    expect(heard.toSorted()).toEqual(['b/L1/status online', 'b/passages one']);
  });

  it('grants a client a hundred subscriptions and no more', async () => {
    const listener = await client();
    for (let i = 0; i < 100; i++) await listener.subscribeAsync(`t/${i}`, { qos: 1 });
    const [refused] = await listener.subscribeAsync('t/100', { qos: 1 }).catch(() => [{ qos: 128 }]);
    expect(refused?.qos).toBe(128);
  });

  it('stops with clients connected, twice if asked, and frees its port', async () => {
    const sender = await client({ reconnectPeriod: 0 });
    const closed = closing(sender);
    await Promise.all([broker.stop(), broker.stop(), closed]);
    expect(broker.status().connected).toBe(false);
    const socket = connectTcp(Number(new URL(url).port), '127.0.0.1');
    await expect(once(socket, 'connect')).rejects.toMatchObject({ code: 'ECONNREFUSED' });
  });
});
