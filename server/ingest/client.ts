import { X509Certificate } from 'node:crypto';
import { connect as connectTcp, type Socket } from 'node:net';
import { connect as connectTls, createSecureContext, type SecureContext } from 'node:tls';
import { MqttClient, type IClientOptions, type IPublishPacket } from 'mqtt';
import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { SpanbeatError, type ErrorCode } from '#core/contract/errors.ts';
import type { Report } from '../report.ts';
import { gateAcknowledgements, type AcknowledgementGate } from './acknowledgement-gate.ts';
import type { Link, Take } from './link.ts';

export interface OutsideSettings {
  kind: 'outside';
  /** `mqtt://host:1883` or `mqtts://host:8883`; user and password may stand in it, but those below go before. */
  url: string;
  /** Keep it the same over restarts: the broker keeps the session, with what was not acknowledged, under it. */
  clientId: string;
  /** MQTT version, 5 unless the broker does not speak it. */
  protocol?: 4 | 5;
  username?: string;
  password?: string;
  /** PEM texts: authority that signed the broker's certificate; certificate and key of this client. */
  ca?: string;
  cert?: string;
  key?: string;
  /** How long the broker keeps the session while this server is away, default 7 days (MQTT 5). */
  sessionExpiryS?: number;
}

export interface OutsideOptions {
  settings: OutsideSettings;
  filters: () => string[];
  take: Take;
  report: Report;
}

/** Messages the broker may have on their way to us without acknowledgement (MQTT 5; else the broker's own limit). */
const RECEIVE_MAXIMUM = 256;
/** Reading from the broker rests while more than this waits for the disk. */
const LIMIT_PENDING_BYTES = 16 * 1024 * 1024;
/** Publications that wait for the broker; more are refused. */
const LIMIT_PUBLISHING = 1000;
const SESSION_EXPIRY_S = 7 * 86_400;
const RECONNECT_MS = { first: 250, longest: 15_000 };
const STOP_MS = 2000;

/**
 * A client of an outside broker: QoS 1, a session that lasts over restarts, and acknowledgement only after `take` has
 * resolved. Where it rejects the connection is dropped, so that the broker sends the message again.
 */
export function startClient(options: OutsideOptions): Link {
  return new OutsideLink(options);
}

class OutsideLink implements Link {
  readonly #options: OutsideOptions;
  readonly #url: URL;
  readonly #secure: SecureContext | null;
  readonly #client: MqttClient;
  #socket: Socket | null = null;
  #gate: AcknowledgementGate | null = null;
  #pendingBytes = 0;
  readonly #pending = new Set<Promise<void>>();
  #publishing = 0;
  /** What was last told about the broker, so that each change is told once. */
  #trouble: ErrorCode | null = null;
  #stopped: Promise<void> | null = null;

  constructor(options: OutsideOptions) {
    this.#options = options;
    this.#url = parseUrl(options.settings.url);
    this.#secure = this.#url.protocol === 'mqtts:' ? secureContext(options.settings) : null;
    const client = new MqttClient(() => this.#openSocket(), clientOptions(options.settings, this.#url));
    this.#client = client;
    client.handleMessage = (packet, done) => this.#receive(packet, done);
    client.on('connect', () => this.#connected());
    client.on('reconnect', () => this.#backOff());
    client.on('error', (error) => this.#complain(errorCode(error), error.message));
    client.on('close', () => {
      if (this.#stopped === null) this.#complain('BROKER_UNREACHABLE', 'the connection is closed');
    });
  }

  publish(topic: string, payload: Uint8Array | string, { retain = false, qos = 1 } = {}): Promise<void> {
    if (this.#publishing >= LIMIT_PUBLISHING || this.#stopped !== null) {
      const detail = `${this.#publishing} publications wait for the broker`;
      return Promise.reject(new SpanbeatError({ code: 'BROKER_UNREACHABLE', where: this.#url.host, detail }));
    }
    this.#publishing += 1;
    const bytes = typeof payload === 'string' ? payload : Buffer.from(payload);
    return new Promise<void>((resolve, reject) => {
      this.#client.publish(topic, bytes, { retain, qos: qos === 1 ? 1 : 0 }, (error) => {
        this.#publishing -= 1;
        if (error) reject(error);
        else resolve();
      });
    });
  }

  status(): ReturnType<Link['status']> {
    return {
      kind: 'outside',
      connected: this.#client.connected,
      address: `${this.#url.protocol}//${this.#url.host}`,
    };
  }

  refresh(): void {
    if (this.#client.connected) this.#subscribe();
  }

  stop(): Promise<void> {
    this.#stopped ??= this.#close();
    return this.#stopped;
  }

  async #close(): Promise<void> {
    // What is being written may still be acknowledged; what is not then comes again after the next start.
    await within(STOP_MS, Promise.allSettled([...this.#pending]));
    await within(STOP_MS, this.#client.endAsync());
    this.#client.end(true);
    this.#socket?.destroy();
  }

  #openSocket(): Socket {
    const host = this.#url.hostname.replace(/^\[(.*)\]$/, '$1');
    const secureContext = this.#secure;
    const port = Number(this.#url.port || (secureContext === null ? 1883 : 8883));
    const socket =
      secureContext === null
        ? connectTcp({ host, port })
        : connectTls({ host, port, secureContext, ...(/^[\d.]+$|:/.test(host) ? {} : { servername: host }) });
    socket.setNoDelay(true);
    this.#socket = socket;
    this.#gate = gateAcknowledgements(socket);
    return socket;
  }

  #connected(): void {
    this.#trouble = null;
    this.#subscribe();
  }

  #subscribe(): void {
    const { report, filters } = this.#options;
    for (const filter of filters()) {
      this.#client.subscribe(filter, { qos: 1 }, (error) => {
        if (error === null || this.#stopped !== null || !this.#client.connected) return;
        report({ code: 'BROKER_REFUSED', where: filter, detail: `subscription: ${error.message}` });
      });
    }
  }

  /** Each attempt waits twice as long as the one before; a message that could be kept ends that. */
  #backOff(): void {
    const now = this.#client.options.reconnectPeriod ?? RECONNECT_MS.first;
    this.#client.options.reconnectPeriod = Math.min(2 * now, RECONNECT_MS.longest);
  }

  #receive(packet: IPublishPacket, done: () => void): void {
    const payload = typeof packet.payload === 'string' ? Buffer.from(packet.payload) : packet.payload;
    const socket = this.#socket;
    const durable = this.#options.take({ topic: packet.topic, payload, retain: packet.retain });
    if (packet.qos > 0 && packet.messageId !== undefined) this.#gate?.hold(packet.messageId, durable);
    this.#pending.add(durable);
    this.#pendingBytes += payload.length;
    const settled = (): void => {
      this.#pending.delete(durable);
      this.#pendingBytes -= payload.length;
    };
    const rest = this.#pendingBytes > LIMIT_PENDING_BYTES;
    if (!rest) done();
    durable.then(
      () => {
        settled();
        this.#client.options.reconnectPeriod = RECONNECT_MS.first;
        if (rest) done();
      },
      () => {
        settled();
        socket?.destroy();
        if (rest) done();
      },
    );
  }

  #complain(code: ErrorCode, detail: string): void {
    // A refusal is followed by a close of the connection, which says nothing new.
    if (this.#trouble === code || (this.#trouble === 'BROKER_REFUSED' && code === 'BROKER_UNREACHABLE')) return;
    this.#trouble = code;
    this.#options.report({ code, where: this.#url.host, detail });
  }
}

function clientOptions(settings: OutsideSettings, url: URL): IClientOptions {
  const { protocol = 5, clientId, sessionExpiryS } = settings;
  const username = settings.username ?? unescaped(url.username);
  const password = settings.password ?? unescaped(url.password);
  return {
    protocolVersion: protocol,
    clientId,
    clean: false,
    ...(username === undefined ? {} : { username }),
    ...(password === undefined ? {} : { password }),
    keepalive: 30,
    connectTimeout: 10_000,
    reconnectPeriod: RECONNECT_MS.first,
    reconnectOnConnackError: true,
    resubscribe: false,
    ...(protocol === 5
      ? {
          properties: {
            sessionExpiryInterval: sessionExpiryS ?? SESSION_EXPIRY_S,
            receiveMaximum: RECEIVE_MAXIMUM,
            // Somewhat too large still comes, to be refused and counted; beyond that the broker drops it.
            maximumPacketSize: 4 * BLOCK_LIMITS.bytes,
          },
        }
      : {}),
  };
}

/** Of a part of an address; undefined where it is absent. */
const unescaped = (text: string): string | undefined => (text === '' ? undefined : decodeURIComponent(text));

function secureContext({ ca, cert, key }: OutsideSettings): SecureContext {
  try {
    // What is no certificate would be left out without a word, and then every broker be refused.
    if (ca !== undefined) new X509Certificate(ca);
    return createSecureContext({
      ...(ca === undefined ? {} : { ca }),
      ...(cert === undefined ? {} : { cert }),
      ...(key === undefined ? {} : { key }),
    });
  } catch (error) {
    const detail = error instanceof Error ? error.message : String(error);
    throw new SpanbeatError({ code: 'SETTINGS_INVALID', where: 'ca, cert or key of the broker', detail });
  }
}

function parseUrl(url: string): URL {
  const parsed = URL.canParse(url) ? new URL(url) : null;
  if (
    parsed === null ||
    !['mqtt:', 'mqtts:'].includes(parsed.protocol) ||
    parsed.hostname === '' ||
    !isReadable(parsed)
  ) {
    throw new SpanbeatError({ code: 'USAGE', detail: 'a broker is given as mqtt://host:port or mqtts://host:port' });
  }
  return parsed;
}

function isReadable({ username, password }: URL): boolean {
  try {
    decodeURIComponent(username + password);
    return true;
  } catch {
    return false; // a % that escapes nothing
  }
}

/** Return codes of CONNACK are numbers (MQTT 3.1.1 section 3.2.2.3, MQTT 5 section 3.2.2.2); others come from Node. */
function errorCode(error: Error): ErrorCode {
  const { code } = error as Error & { code?: string | number };
  if (typeof code === 'number') return [3, 136, 137, 151, 159].includes(code) ? 'BROKER_UNREACHABLE' : 'BROKER_REFUSED';
  return /CERT|SSL|TLS|_SIGNATURE|INVALID_CA/.test(code ?? '') ? 'BROKER_REFUSED' : 'BROKER_UNREACHABLE';
}

async function within(milliseconds: number, work: Promise<unknown>): Promise<void> {
  let timer: NodeJS.Timeout | undefined;
  const late = new Promise((resolve) => (timer = setTimeout(resolve, milliseconds)));
  await Promise.race([work.catch(() => undefined), late]);
  clearTimeout(timer);
}
