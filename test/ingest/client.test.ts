import { execFileSync } from 'node:child_process';
import { mkdtempSync, readFileSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { connectAsync, type MqttClient } from 'mqtt';
import { afterEach, beforeEach, describe, expect, it } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { startClient, type OutsideSettings } from '../../server/ingest/client.ts';
import type { Incoming, Link } from '../../server/ingest/link.ts';
import { available } from '../support/debian.ts';
import { freePort, startMosquitto, type Mosquitto } from '../support/mosquitto.ts';

const brokers: Mosquitto[] = [];
const links: Link[] = [];
const senders: MqttClient[] = [];
let folder: string;

beforeEach(() => {
  folder = mkdtempSync(join(tmpdir(), 'spanbeat-client-'));
});

afterEach(async () => {
  await Promise.all(senders.splice(0).map((sender) => sender.endAsync(true)));
  await Promise.all(links.splice(0).map((link) => link.stop()));
  await Promise.all(brokers.splice(0).map((broker) => broker.remove()));
  rmSync(folder, { recursive: true, force: true });
});

async function mosquitto(lines: readonly string[] = []): Promise<Mosquitto> {
  const broker = await startMosquitto(lines);
  brokers.push(broker);
  return broker;
}

/** A client under test, what it took, and what it complained of. */
function clientOf(
  settings: Partial<OutsideSettings> & { url: string },
  take: (message: Incoming) => Promise<void> = () => Promise.resolve(),
) {
  const taken: string[] = [];
  const complaints: Complaint[] = [];
  const link = startClient({
    settings: { kind: 'outside', clientId: 'under-test', ...settings },
    filters: () => ['spanbeat/#'],
    take: (message) => {
      taken.push(Buffer.from(message.payload).toString());
      return take(message);
    },
    report: (complaint) => void complaints.push(complaint),
  });
  links.push(link);
  return { link, taken, complaints, codes: () => complaints.map(({ code }) => code) };
}

async function senderTo(broker: Mosquitto): Promise<MqttClient> {
  const sender = await connectAsync(broker.url, { reconnectPeriod: 50 });
  sender.on('error', () => undefined);
  senders.push(sender);
  return sender;
}

async function until(holds: () => boolean): Promise<void> {
  while (!holds()) await new Promise((resolve) => setTimeout(resolve, 5));
}

/** The subscription is granted when a message comes through. */
async function listening(sender: MqttClient, taken: readonly string[]): Promise<void> {
  while (!taken.includes('hello')) {
    await sender.publishAsync('spanbeat/hello', 'hello', { qos: 1 });
    await new Promise((resolve) => setTimeout(resolve, 10));
  }
}

describe.skipIf(!available('mosquitto'))('the client of an outside broker', () => {
  it('waits for a broker that is down at the start, says so once, and takes messages when it comes up', async () => {
    const broker = await mosquitto();
    await broker.stop();
    const { link, taken, codes } = clientOf({ url: broker.url });
    await until(() => codes().length > 0);
    expect(link.status().connected).toBe(false);
    await new Promise((resolve) => setTimeout(resolve, 300));
    expect(codes()).toEqual(['BROKER_UNREACHABLE']);
    await broker.start();
    const sender = await senderTo(broker);
    await listening(sender, taken);
    expect(link.status()).toMatchObject({ connected: true, kind: 'outside' });
  });

  it('finds the broker again that went away, and gets what came for it meanwhile', async () => {
    const broker = await mosquitto();
    const { link, taken, codes } = clientOf({ url: broker.url });
    const sender = await senderTo(broker);
    await listening(sender, taken);
    await broker.stop();
    await until(() => codes().includes('BROKER_UNREACHABLE'));
    expect(link.status().connected).toBe(false);
    await broker.start();
    await until(() => sender.connected);
    await sender.publishAsync('spanbeat/b/L1/samples', 'after', { qos: 1 });
    await until(() => taken.includes('after'));
    expect(codes().filter((code) => code === 'BROKER_UNREACHABLE')).toHaveLength(1);
  });

  it('gets after a restart of its own what was sent while it was away', async () => {
    const broker = await mosquitto();
    const first = clientOf({ url: broker.url });
    const sender = await senderTo(broker);
    await listening(sender, first.taken);
    await first.link.stop();
    for (let i = 0; i < 20; i++) await sender.publishAsync('spanbeat/b/L1/samples', String(i), { qos: 1 });
    const second = clientOf({ url: broker.url });
    await until(() => second.taken.includes('19'));
    expect(second.taken.filter((text) => text !== 'hello')).toEqual(Array.from({ length: 20 }, (_, i) => String(i)));
  });

  it.each([4, 5] as const)(
    'acknowledges only what is durable: the rest comes again to its next life (MQTT version %s)',
    async (protocol) => {
      const broker = await mosquitto();
      const never = new Promise<void>(() => undefined);
      const first = clientOf({ url: broker.url, protocol }, ({ payload }) =>
        Buffer.from(payload).toString().startsWith('held') ? never : Promise.resolve(),
      );
      const sender = await senderTo(broker);
      await listening(sender, first.taken);
      for (const text of ['held 1', 'kept 1', 'held 2', 'kept 2']) {
        await sender.publishAsync('spanbeat/b/L1/samples', text, { qos: 1 });
      }
      // One message does not wait for the other.
      await until(() => first.taken.includes('kept 2'));
      await first.link.stop();
      const second = clientOf({ url: broker.url, protocol });
      await until(() => second.taken.includes('held 2'));
      await sender.publishAsync('spanbeat/b/L1/samples', 'end', { qos: 1 });
      await until(() => second.taken.includes('end'));
      expect(second.taken.filter((text) => text !== 'hello')).toEqual(['held 1', 'held 2', 'end']);
    },
  );

  it('drops the connection where a message could not be kept, so that it comes again', async () => {
    const broker = await mosquitto();
    let refusals = 3;
    const { taken } = clientOf({ url: broker.url }, ({ payload }) =>
      Buffer.from(payload).toString() === 'x' && refusals-- > 0
        ? Promise.reject(new SpanbeatError({ code: 'DISK_FULL', detail: 'told to fail' }))
        : Promise.resolve(),
    );
    const sender = await senderTo(broker);
    await listening(sender, taken);
    await sender.publishAsync('spanbeat/b/L1/samples', 'x', { qos: 1 });
    await until(() => taken.filter((text) => text === 'x').length === 4);
    await sender.publishAsync('spanbeat/b/L1/samples', 'end', { qos: 1 });
    await until(() => taken.includes('end'));
    expect(taken.filter((text) => text === 'x')).toHaveLength(4);
  });

  it('says that a password was refused, and connects with the right one', async () => {
    const passwords = join(folder, 'passwords');
    execFileSync('mosquitto_passwd', ['-b', '-c', passwords, 'bridge', 'right']);
    const broker = await mosquitto(['allow_anonymous false', `password_file ${passwords}`]);
    const wrong = clientOf({ url: broker.url, username: 'bridge', password: 'wrong' });
    await until(() => wrong.codes().length > 0);
    expect(wrong.codes()).toEqual(['BROKER_REFUSED']);
    expect(JSON.stringify(wrong.complaints)).not.toContain('wrong');
    const right = clientOf({ url: broker.url, username: 'bridge', password: 'right', clientId: 'other' });
    await until(() => right.link.status().connected);
    expect(right.codes()).toEqual([]);
  });

  it('speaks TLS with a broker whose authority it is given, and refuses one of another authority', async () => {
    const authority = (name: string): void => {
      const words = ['req', '-x509', '-newkey', 'rsa:2048', '-nodes', '-days', '2', '-subj', `/CN=${name}`];
      openssl(...words, '-keyout', `${name}.key`, '-out', `${name}.pem`);
    };
    authority('ours');
    authority('others');
    openssl(
      'req',
      '-newkey',
      'rsa:2048',
      '-nodes',
      '-subj',
      '/CN=127.0.0.1',
      '-keyout',
      'broker.key',
      '-out',
      'broker.csr',
    );
    execFileSync('sh', ['-c', 'printf "subjectAltName=IP:127.0.0.1" > names'], { cwd: folder });
    const signed = ['x509', '-req', '-in', 'broker.csr', '-CA', 'ours.pem', '-CAkey', 'ours.key', '-CAcreateserial'];
    openssl(...signed, '-days', '2', '-extfile', 'names', '-out', 'broker.pem');
    const port = await freePort();
    await mosquitto([
      `listener ${port} 127.0.0.1`,
      `cafile ${join(folder, 'ours.pem')}`,
      `certfile ${join(folder, 'broker.pem')}`,
      `keyfile ${join(folder, 'broker.key')}`,
    ]);
    const url = `mqtts://127.0.0.1:${port}`;
    const trusting = clientOf({ url, ca: readFileSync(join(folder, 'ours.pem'), 'utf8') });
    const [broker] = brokers;
    const sender = await senderTo(broker!);
    await listening(sender, trusting.taken);
    expect(trusting.codes()).toEqual([]);
    const wary = clientOf({ url, ca: readFileSync(join(folder, 'others.pem'), 'utf8'), clientId: 'wary' });
    await until(() => wary.codes().length > 0);
    expect(wary.codes()).toEqual(['BROKER_REFUSED']);
    expect(wary.complaints[0]?.detail).toMatch(/certificate|issuer|verify/i);
    expect(wary.link.status().connected).toBe(false);
  });

  it('refuses an address that is none, without trying', () => {
    for (const url of ['nowhere', 'http://127.0.0.1', 'mqtt://']) {
      expect(() => clientOf({ url })).toThrow(/USAGE/);
    }
  });
});

function openssl(...words: string[]): void {
  execFileSync('openssl', words, { cwd: folder, stdio: 'ignore' });
}
