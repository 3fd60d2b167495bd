import { createServer, type AddressInfo, type Server, type Socket } from 'node:net';
import { Aedes, type AedesPublishPacket, type Client, type PublishPacket } from 'aedes';
import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { SpanbeatError, type Complaint } from '#core/contract/errors.ts';
import type { Report } from '../report.ts';
import type { Link, Take } from './link.ts';
import { PacketFollower } from './packet-follower.ts';

export interface EmbeddedSettings {
  kind: 'embedded';
  /** Default 127.0.0.1: the embedded broker asks nobody for a password. */
  host?: string;
  /** Where given, no other port is tried. Default 1883 or the next that is free. */
  port?: number;
}

export interface EmbeddedOptions {
  settings: EmbeddedSettings;
  take: Take;
  /** Topics on which only the server itself publishes. */
  isReserved: (topic: string) => boolean;
  /** Topics whose retained message is kept. */
  isRetained: (topic: string) => boolean;
  report: Report;
}

const DEFAULT_PORT = 1883;
const PORTS_TRIED = 20;
/** Clients at one time; more are turned away by the socket. */
const LIMIT_CLIENTS = 512;
const LIMIT_SUBSCRIPTIONS = 100;
/** Largest control packet: a block, its topic, and the header. A client that sends a larger one is dropped. */
const LIMIT_PACKET_BYTES = BLOCK_LIMITS.bytes + 65_535 + 16;
/** Read from one client before it is durable, and written to a subscriber before it reads: more is left out. */
const WINDOW_BYTES = 512 * 1024;

/**
 * A broker of our own for loggers that reach this machine, MQTT 3.1.1. It acknowledges a message only after `take` has
 * resolved, and reads on from a client only then: a client that sends faster than the disk writes is slowed by TCP.
 *
 * It keeps nothing: sessions end with the connection, and a subscriber that falls behind by more than WINDOW_BYTES
 * loses messages. Who needs more than that uses an outside broker.
 */
export async function startBroker(options: EmbeddedOptions): Promise<Link> {
  const { settings, report } = options;
  const host = settings.host ?? '127.0.0.1';
  const windows = new WeakMap<object, ReadingWindow>();
  const broker = await Aedes.createBroker({
    connectTimeout: 10_000,
    drainTimeout: 5000,
    maxTopicLevels: 16,
    preConnect(_client, packet, next) {
      packet.clean = true;
      next(null, true);
    },
    authorizePublish: (client, packet, next) =>
      admit(options, client && windows.get(client.conn), client, packet, next),
    authorizeSubscribe: limitSubscriptions(),
    authorizeForward: forwardTo(report),
  });
  broker.on('connectionError', (_client, { message }) => refuse(report, message));
  broker.on('clientError', (client, error) => {
    // What our own steps refused has been told, and a connection that breaks off is no refusal.
    if (!(error instanceof SpanbeatError) && !('syscall' in error)) refuse(report, `${client.id}: ${error.message}`);
  });

  const sockets = new Set<Socket>();
  const server = createServer({ highWaterMark: WINDOW_BYTES, noDelay: true }, (socket) => {
    sockets.add(socket);
    socket.on('close', () => sockets.delete(socket));
    const window = new ReadingWindow();
    windows.set(socket, window);
    limitReading(socket, window, report);
    broker.handle(socket);
  });
  server.maxConnections = LIMIT_CLIENTS;
  server.on('drop', () => {
    refuse(report, `one more than ${LIMIT_CLIENTS} clients at a time`);
  });
  try {
    await listen(server, host, settings.port);
  } catch (error) {
    await new Promise<void>((resolve) => broker.close(resolve));
    throw error;
  }
  const { port } = server.address() as AddressInfo;

  let stopped: Promise<void> | null = null;
  return {
    publish: (topic, payload, { retain = false, qos = 1 } = {}) => publish(broker, topic, payload, retain, qos),
    status: () => ({ kind: 'embedded', connected: stopped === null, address: `mqtt://${host}:${port}` }),
    refresh: () => undefined,
    stop: () => (stopped ??= close(broker, server, sockets)),
  };
}

/**
 * The library acknowledges QoS 1 and 2 after this step and forwards only then, so that a message waits here until it
 * is durable. An error closes the connection without acknowledgement.
 */
function admit(
  { take, isReserved, isRetained, report }: EmbeddedOptions,
  window: ReadingWindow | null | undefined,
  client: Client | null,
  packet: PublishPacket,
  next: (error?: Error | null) => void,
): void {
  if (packet.topic.startsWith('$') || isReserved(packet.topic)) {
    const detail = `${client?.id ?? 'a client'} published on ${packet.topic}, which is the server's own`;
    next(new SpanbeatError(refuse(report, detail)));
    return;
  }
  const payload = typeof packet.payload === 'string' ? Buffer.from(packet.payload) : packet.payload;
  const retain = packet.retain;
  packet.retain = retain && isRetained(packet.topic);
  const durable = take({ topic: packet.topic, payload, retain });
  window?.hold(payload.length, durable);
  durable.then(
    () => next(null),
    (error: unknown) => next(error instanceof Error ? error : new Error(String(error))),
  );
}

function refuse(report: Report, detail: string): Complaint {
  const complaint: Complaint = { code: 'CLIENT_REFUSED', where: 'embedded broker', detail: detail.slice(0, 300) };
  report(complaint);
  return complaint;
}

function limitSubscriptions(): NonNullable<ConstructorParameters<typeof Aedes>[0]>['authorizeSubscribe'] & object {
  const counts = new WeakMap<Client, number>();
  return (client, subscription, next) => {
    const count = (counts.get(client) ?? 0) + 1;
    counts.set(client, count);
    next(null, count > LIMIT_SUBSCRIPTIONS ? null : subscription);
  };
}

/** Messages to a subscriber that does not read are left out, so that it cannot slow the loggers. */
function forwardTo(report: Report): (client: Client, packet: AedesPublishPacket) => AedesPublishPacket | null {
  const told = new WeakSet<Client>();
  return (client, packet) => {
    const waiting = client.conn.writableLength;
    if (waiting === 0 || waiting + packet.payload.length < WINDOW_BYTES) return packet;
    if (!told.has(client)) {
      told.add(client);
      const detail = `subscriber ${client.id} is ${waiting} bytes behind and loses messages`;
      report({ code: 'MESSAGE_RATE_LIMIT', where: 'embedded broker', detail });
    }
    return null;
  };
}

/**
 * What was read from a client and is not durable. The library itself counts packets against chunks of the socket, which
 * bounds nothing where a packet is as large as a chunk.
 */
class ReadingWindow {
  #bytes = 0;

  hold(bytes: number, durable: Promise<void>): void {
    this.#bytes += bytes;
    const settled = (): void => void (this.#bytes -= bytes);
    durable.then(settled, settled);
  }

  isFull(): boolean {
    return this.#bytes > WINDOW_BYTES;
  }
}

/**
 * The library's parser would collect a packet of up to 256 MB before it looks at it. It asks for more after each packet
 * that it is done with, so that a client whose window was full is read again when its messages are durable.
 */
function limitReading(socket: Socket, window: ReadingWindow, report: Report): void {
  const follower = new PacketFollower();
  const read = socket.read.bind(socket);
  const drop = (code: 'MESSAGE_TOO_LARGE' | 'MESSAGE_ENCODING', detail: string): void => {
    report({ code, where: 'embedded broker', detail });
    socket.destroy();
  };
  socket.read = (size?: number): unknown => {
    if (window.isFull()) return null;
    const chunk = read(size) as Buffer | null;
    if (chunk === null) return null;
    let largest = 0;
    const sound = follower.follow(chunk, {
      begin: (_type, length) => {
        largest = Math.max(largest, length);
      },
    });
    if (!sound) drop('MESSAGE_ENCODING', 'a client does not speak MQTT');
    else if (largest > LIMIT_PACKET_BYTES) {
      drop('MESSAGE_TOO_LARGE', `a packet of ${largest} bytes, at most ${LIMIT_PACKET_BYTES}`);
    } else return chunk;
    return null;
  };
}

/** What the system answers where an address or port is not for us. */
const REFUSED_ADDRESS: ReadonlySet<string> = new Set(['EACCES', 'EADDRNOTAVAIL', 'ENOTFOUND', 'EAI_AGAIN']);

async function listen(server: Server, host: string, demanded: number | undefined): Promise<void> {
  const first = demanded ?? DEFAULT_PORT;
  const last = demanded === undefined ? first + PORTS_TRIED - 1 : first;
  for (let port = first; port <= last; port += 1) {
    try {
      await new Promise<void>((resolve, reject) => {
        server.once('error', reject);
        server.listen(port, host, () => {
          server.off('error', reject);
          resolve();
        });
      });
      return;
    } catch (error) {
      const code = (error as NodeJS.ErrnoException).code ?? '';
      if (REFUSED_ADDRESS.has(code)) {
        throw new SpanbeatError({
          code: 'PORT_REFUSED',
          where: `${host}:${port}`,
          detail: `the system answers ${code}`,
        });
      }
      if (code !== 'EADDRINUSE') throw error;
    }
  }
  const where = first === last ? `${host}:${first}` : `${host}:${first} to ${last}`;
  throw new SpanbeatError({ code: 'PORT_IN_USE', where, detail: 'the embedded broker cannot listen' });
}

function publish(
  broker: Aedes,
  topic: string,
  payload: Uint8Array | string,
  retain: boolean,
  qos: 0 | 1,
): Promise<void> {
  const packet = { cmd: 'publish' as const, topic, payload: Buffer.from(payload), retain, qos, dup: false };
  return new Promise((resolve, reject) => {
    broker.publish(packet, (error) => {
      if (error) reject(error);
      else resolve();
    });
  });
}

async function close(broker: Aedes, server: Server, sockets: ReadonlySet<Socket>): Promise<void> {
  const closed = new Promise<void>((resolve) => server.close(() => resolve()));
  await new Promise<void>((resolve) => broker.close(resolve));
  for (const socket of sockets) socket.destroy();
  await closed;
}
