import { connect as connectTcp, type Socket } from 'node:net';
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

/** A connection below MQTT. */
async function tcp(): Promise<Socket> {
  const socket = connectTcp(Number(new URL(url).port), '127.0.0.1');
  socket.on('error', () => undefined);
  await once(socket, 'connect');
  return socket;
}

/** MQTT 3.1.1 packets by hand: CONNECT (section 3.1) of a clean session, and PUBLISH (3.3). */
function connectPacket(id: string): Buffer {
  const body = [0, 4, ...Buffer.from('MQTT'), 4, 2, 0, 60, 0, id.length, ...Buffer.from(id)];
  return Buffer.from([0x10, body.length, ...body]);
}

function publishPacket(topic: string, payload: Buffer, messageId: number): Buffer {
  const length = 2 + topic.length + 2 + payload.length;
  const head = [0x32, (length & 127) | 128, ((length >> 7) & 127) | 128, length >> 14, topic.length >> 8, topic.length];
  return Buffer.concat([
    Buffer.from(head),
    Buffer.from(topic),
    Buffer.from([messageId >> 8, messageId & 255]),
    payload,
  ]);
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

  it.each<[string, Buffer[]]>([
    ['a packet before CONNECT', [publishPacket('t', Buffer.alloc(8), 1)]],
    ['a second CONNECT', [connectPacket('x'), connectPacket('x')]],
    ['a topic longer than its packet', [connectPacket('x'), Buffer.from([0x30, 4, 0, 200, 0x74, 0x74])]],
    ['a quality of service of 3', [connectPacket('x'), Buffer.from([0x36, 6, 0, 1, 0x74, 0, 1, 0x78])]],
    ['a wildcard in the topic', [connectPacket('x'), publishPacket('spanbeat/+/L1/samples', Buffer.alloc(8), 1)]],
    ['no topic', [connectPacket('x'), publishPacket('', Buffer.alloc(8), 1)]],
    ['a topic of twenty levels', [connectPacket('x'), publishPacket('a/'.repeat(20), Buffer.alloc(8), 1)]],
    ['a packet type of 0', [connectPacket('x'), Buffer.from([0x00, 2, 1, 1])]],
    ['a subscription to nothing', [connectPacket('x'), Buffer.from([0x82, 2, 0, 1])]],
  ])('drops a client that sends %s, says so, takes nothing of it and disturbs no other', async (_, packets) => {
    const good = await client({ reconnectPeriod: 0 });
    const socket = await tcp();
    socket.resume();
    const closed = once(socket, 'close');
    for (const packet of packets) socket.write(packet);
    await closed;
    await until(() => codes().length > 0);
    expect(new Set(codes())).toEqual(new Set(['CLIENT_REFUSED']));
    expect(taken).toEqual([]);
    await good.publishAsync('t', 'x', { qos: 1 });
    expect(taken).toHaveLength(1);
    expect(good.connected).toBe(true);
  });

  it('says nothing of a connection that merely breaks off, in the middle of a packet too', async () => {
    const socket = await tcp();
    socket.resume();
    socket.write(connectPacket('x'));
    await once(socket, 'data');
    socket.write(publishPacket('t', Buffer.alloc(3000), 1).subarray(0, 1000));
    socket.resetAndDestroy();
    const good = await client();
    for (let i = 0; i < 20; i++) await good.publishAsync('t', 'x', { qos: 1 });
    expect(codes()).toEqual([]);
    expect(taken).toHaveLength(20);
  });

  it('refuses MQTT 5, which the library does not speak, and says so', async () => {
    const refused = connectAsync(url, { protocolVersion: 5, reconnectPeriod: 0, connectTimeout: 2000 });
    await expect(refused).rejects.toThrow();
    await until(() => codes().length > 0);
    expect(codes()).toEqual(['CLIENT_REFUSED']);
    expect(complaints[0]!.detail).toContain('protocol version');
  });

  it('takes the messages of each of many clients in the order they were sent, each once', async () => {
    take = () => new Promise((resolve) => setImmediate(resolve));
    const many = await Promise.all(Array.from({ length: 60 }, () => client()));
    const sending = many.map((one, sender) =>
      Promise.all(Array.from({ length: 30 }, (_, i) => one.publishAsync(`t/${sender}`, String(i), { qos: 1 }))),
    );
    await Promise.all(sending);
    for (let sender = 0; sender < 60; sender++) {
      const own = taken.filter(({ topic }) => topic === `t/${sender}`);
      expect(own.map(({ payload }) => Buffer.from(payload).toString())).toEqual(
        Array.from({ length: 30 }, (_, i) => String(i)),
      );
    }
  });

  it('takes 512 clients at a time, tells of one more, and lets the next in when one has left', async () => {
    const all = await Promise.all(Array.from({ length: 512 }, () => tcp()));
    const more = await tcp();
    more.resume();
    await once(more, 'close');
    expect(codes()).toEqual(['CLIENT_REFUSED']);
    expect(complaints[0]!.detail).toContain('512');
    all[0]!.destroy();
    const late = await client({ connectTimeout: 500 });
    await late.publishAsync('t', 'x', { qos: 1 });
    expect(taken).toHaveLength(1);
    for (const socket of all) socket.destroy();
  });

  it('reads no further from a client whose messages are not durable yet', async () => {
    const { promise: durable, resolve: written } = Promise.withResolvers<undefined>();
    take = () => durable;
    const socket = await tcp();
    socket.resume();
    socket.write(connectPacket('eager'));
    const block = Buffer.alloc(60_000);
    const count = 1000;
    for (let id = 1; id <= count; id++) socket.write(publishPacket('t', block, id));
    await until(() => taken.length > 0);
    // Wait until nothing moves any more.
    for (let before = -1; before < taken.length;) {
      before = taken.length;
      await new Promise((resolve) => setTimeout(resolve, 100));
    }
    // A window of half a megabyte, and what one more reading gives, of sixty megabytes that were sent.
    expect(taken.length * block.length).toBeLessThanOrEqual(2 * (512 * 1024 + block.length));
    written(undefined);
    await until(() => taken.length === count);
    expect(codes()).toEqual([]);
    socket.destroy();
  });

  it('leaves out messages to a subscriber that does not read, says so once, and does not slow the sender', async () => {
    const idle = await tcp();
    idle.write(connectPacket('idle'));
    // SUBSCRIBE to "#" with QoS 0 (section 3.8).
    idle.write(Buffer.from([0x82, 6, 0, 1, 0, 1, 0x23, 0]));
    await once(idle, 'readable');
    const sender = await client();
    // More than sockets of the loopback hold.
    for (let i = 0; i < 500; i++) await sender.publishAsync('t', Buffer.alloc(60_000), { qos: 1 });
    expect(taken).toHaveLength(500);
    expect(codes()).toEqual(['MESSAGE_RATE_LIMIT']);
    expect(complaints[0]!.detail).toContain('idle');
    idle.destroy();
  });

  it('acknowledges no message of QoS 2 before it is durable either', async () => {
    const { promise: durable, resolve: written } = Promise.withResolvers<undefined>();
    take = ({ topic }) => (topic === 'slow' ? durable : Promise.resolve());
    const [slow, quick] = [await client(), await client()];
    const heard: string[] = [];
    slow.on('packetreceive', ({ cmd }) => void heard.push(cmd));
    const publishing = slow.publishAsync('slow', 'x', { qos: 2 });
    await until(() => taken.length === 1);
    for (let i = 0; i < 50; i++) await quick.publishAsync('quick', 'x', { qos: 1 });
    expect(heard).not.toContain('pubrec');
    written(undefined);
    await publishing;
    expect(heard).toContain('pubcomp');
    expect(taken.filter(({ topic }) => topic === 'slow')).toHaveLength(1);
  });

  it('takes the last will of a logger as its word, and no last will on topics of the server', async () => {
    const listener = await client();
    const heard: string[] = [];
    listener.on('message', (topic) => void heard.push(topic));
    await listener.subscribeAsync('#', { qos: 1 });
    for (const topic of ['b/alarms', 'b/L1/status']) {
      const one = await client({
        reconnectPeriod: 0,
        will: { topic, payload: Buffer.from('gone'), qos: 1, retain: true },
      });
      one.stream.destroy();
    }
    await until(() => taken.length === 1 && codes().length === 1 && heard.length === 1);
    expect(taken.map(({ topic, payload }) => [topic, Buffer.from(payload).toString()])).toEqual([
      ['b/L1/status', 'gone'],
    ]);
    expect(heard).toEqual(['b/L1/status']);
    expect(codes()).toEqual(['CLIENT_REFUSED']);
  });

  it('takes the next free port where none is demanded, and says which', async () => {
    const settings = { kind: 'embedded' } as const;
    const more = { take: () => Promise.resolve(), isReserved: () => false, isRetained: () => false };
    const two = [];
    for (let i = 0; i < 2; i++) two.push(await startBroker({ settings, ...more, report: () => undefined }));
    const ports = two.map((one) => Number(new URL(one.status().address).port));
    expect(ports[1]).toBeGreaterThan(ports[0]!);
    expect(ports[0]).toBeGreaterThanOrEqual(1883);
    await Promise.all(two.map((one) => one.stop()));
  });

  it.each(['192.0.2.1', 'no.such.name.invalid'])('says that the address %s is not of this machine', async (host) => {
    // RFC 5737 and RFC 6761: an address and a name that no machine has.
    const refused = startBroker({
      settings: { kind: 'embedded', host, port: 0 },
      take: () => Promise.resolve(),
      isReserved: () => false,
      isRetained: () => false,
      report: () => undefined,
    });
    await expect(refused).rejects.toMatchObject({ code: 'PORT_REFUSED' });
  });

  it.each(['spanbeat/b/alarms', '$SYS/broker/load'])('lets nobody else publish on %s', async (topic) => {
    const sender = await client({ reconnectPeriod: 0 });
    const closed = closing(sender);
    sender.publish(topic, '{}', { qos: 1 }, () => undefined);
    await closed;
    expect(taken).toEqual([]);
    expect(codes()).toEqual(['CLIENT_REFUSED']);
    expect(complaints[0]!.detail).toContain(topic);
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
