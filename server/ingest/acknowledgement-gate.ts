import type { Socket } from 'node:net';
import { PacketFollower } from './packet-follower.ts';

/** Control packet type, MQTT section 2.1.2. */
const PUBACK = 4;

/**
 * Holds back the acknowledgements that an MQTT client writes on a socket until the messages they speak of are durable.
 *
 * The client library handles one message after the other and acknowledges each before it looks at the next. Waiting
 * inside its handler would cost one disk write a message; here it may go on at once, many messages share a write, and
 * only the PUBACK packets wait. They are found by the framing of the protocol (section 2.1), whatever the library does
 * inside. An acknowledgement that never becomes due dies with the connection, and the broker sends the message again.
 */
export interface AcknowledgementGate {
  /** The acknowledgement of this message waits for the promise; it is dropped where the promise rejects. */
  hold(messageId: number, durable: Promise<void>): void;
}

export function gateAcknowledgements(socket: Socket): AcknowledgementGate {
  const held = new Map<number, Promise<void>>();
  const write = socket.write.bind(socket);
  const packets = new PacketCollector();

  const release = (messageId: number, packet: Buffer): boolean => {
    const durable = held.get(messageId);
    held.delete(messageId);
    // An acknowledgement that nobody announced has nothing to wait for: its message was taken without one.
    if (durable === undefined) return write(packet);
    const open = (): void => {
      if (!socket.destroyed) write(packet);
    };
    durable.then(open, () => undefined);
    return true;
  };

  socket.write = (chunk: Uint8Array | string, ...rest: unknown[]): boolean => {
    const bytes = typeof chunk === 'string' ? Buffer.from(chunk, rest[0] as BufferEncoding | undefined) : chunk;
    let flowing = !socket.writableNeedDrain;
    for (const packet of packets.collect(bytes)) {
      flowing = packet[0]! >> 4 === PUBACK ? release(messageIdOf(packet), packet) : write(packet);
    }
    const done = rest.at(-1);
    if (typeof done === 'function') process.nextTick(done);
    return flowing;
  };

  return { hold: (messageId, durable) => void held.set(messageId, durable) };
}

/** A PUBACK is two bytes of fixed header, for it is shorter than 128 bytes, then the identifier (section 3.4). */
const messageIdOf = (packet: Buffer): number => packet.readUInt16BE(2);

/** Puts the pieces that are written back together to whole packets. */
class PacketCollector {
  readonly #follower = new PacketFollower();
  #pieces: Uint8Array[] = [];

  collect(bytes: Uint8Array): Buffer[] {
    const packets: Buffer[] = [];
    let from = 0;
    this.#follower.follow(bytes, {
      end: (at) => {
        packets.push(Buffer.concat([...this.#pieces, bytes.subarray(from, at)]));
        this.#pieces = [];
        from = at;
      },
    });
    if (from < bytes.length) this.#pieces.push(bytes.subarray(from));
    return packets;
  }
}
