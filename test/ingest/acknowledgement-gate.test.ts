import { once } from 'node:events';
import { connect, createServer, type AddressInfo, type Server, type Socket } from 'node:net';
import { afterEach, beforeEach, describe, expect, it } from 'vitest';
import { gateAcknowledgements, type AcknowledgementGate } from '../../server/ingest/acknowledgement-gate.ts';

let server: Server;
let socket: Socket;
let peer: Socket;
let gate: AcknowledgementGate;
let arrived: Buffer;

beforeEach(async () => {
  server = createServer();
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
  const taking = once(server, 'connection');
  socket = connect((server.address() as AddressInfo).port, '127.0.0.1');
  [peer] = (await taking) as [Socket];
  arrived = Buffer.alloc(0);
  peer.on('data', (chunk: Buffer) => (arrived = Buffer.concat([arrived, chunk])));
  gate = gateAcknowledgements(socket);
});

afterEach(() => {
  socket.destroy();
  peer.destroy();
  server.close();
});

const puback = (id: number): Buffer => Buffer.from([0x40, 2, id >> 8, id & 255]);
/** MQTT 5 adds a reason and properties to the acknowledgement. */
const longPuback = (id: number): Buffer => Buffer.from([0x40, 4, id >> 8, id & 255, 0, 0]);
const ping = Buffer.from([0xc0, 0]);
const publication = (text: string): Buffer =>
  Buffer.concat([Buffer.from([0x30, 3 + text.length, 0, 1, 0x74]), Buffer.from(text)]);

async function arrival(...packets: Buffer[]): Promise<void> {
  const all = Buffer.concat(packets);
  while (arrived.length < all.length) await once(peer, 'data');
  expect(arrived).toEqual(all);
}

describe('the gate of acknowledgements', () => {
  it('holds an acknowledgement until its message is durable, while everything else passes', async () => {
    const { promise, resolve } = Promise.withResolvers<undefined>();
    gate.hold(300, promise);
    for (const packet of [ping, puback(300), publication('text'), ping]) socket.write(packet);
    await arrival(ping, publication('text'), ping);
    resolve(undefined);
    await arrival(ping, publication('text'), ping, puback(300));
  });

  it('lets acknowledgements go in the order in which messages become durable', async () => {
    const works = [1, 2, 3].map(() => Promise.withResolvers<undefined>());
    works.forEach(({ promise }, i) => gate.hold(i + 1, promise));
    for (const id of [1, 2, 3]) socket.write(longPuback(id));
    works[2]!.resolve(undefined);
    await arrival(longPuback(3));
    works[0]!.resolve(undefined);
    await arrival(longPuback(3), longPuback(1));
    works[1]!.resolve(undefined);
    await arrival(longPuback(3), longPuback(1), longPuback(2));
  });

  it('drops the acknowledgement of a message that was not kept, and passes later ones of the same number', async () => {
    const failed = Promise.reject(new Error('not kept'));
    gate.hold(7, failed);
    socket.write(puback(7));
    socket.write(ping);
    await arrival(ping);
    gate.hold(7, Promise.resolve());
    socket.write(puback(7));
    await arrival(ping, puback(7));
  });

  it('finds packets that are written in pieces, and several that are written at once', async () => {
    const { promise, resolve } = Promise.withResolvers<undefined>();
    gate.hold(5, promise);
    const bytes = Buffer.concat([publication('a'), puback(5), publication('b'), ping]);
    for (const byte of bytes) socket.write(Buffer.from([byte]));
    await arrival(publication('a'), publication('b'), ping);
    gate.hold(6, promise);
    socket.write(Buffer.concat([puback(6), ping]));
    await arrival(publication('a'), publication('b'), ping, ping);
    resolve(undefined);
    await arrival(publication('a'), publication('b'), ping, ping, puback(5), puback(6));
  });

  it('passes an acknowledgement that nobody announced, and tells the writer that its bytes were taken', async () => {
    await new Promise<void>((resolve, reject) => {
      socket.write(puback(9), (error) => (error ? reject(error) : resolve()));
    });
    await arrival(puback(9));
  });

  it('writes nothing on a connection that ended while a message was on its way to the disk', async () => {
    const { promise, resolve } = Promise.withResolvers<undefined>();
    gate.hold(1, promise);
    socket.write(puback(1));
    socket.destroy();
    await once(peer, 'close');
    resolve(undefined);
    await promise;
    expect(arrived).toEqual(Buffer.alloc(0));
  });
});
