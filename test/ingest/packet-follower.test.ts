import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { PacketFollower } from '../../server/ingest/packet-follower.ts';

/** Types, lengths and ends that a follower finds in chunks of a stream. */
function followed(chunks: readonly Uint8Array[]): { begun: [number, number][]; ends: number[]; sound: boolean } {
  const follower = new PacketFollower();
  const begun: [number, number][] = [];
  const ends: number[] = [];
  let before = 0;
  let sound = true;
  for (const chunk of chunks) {
    sound &&= follower.follow(chunk, {
      begin: (type, length) => void begun.push([type, length]),
      end: (at) => void ends.push(before + at),
    });
    before += chunk.length;
  }
  return { begun, ends, sound };
}

/** Remaining length as section 2.2.3 of MQTT 3.1.1 encodes it, in its own words: "encoded byte = X MOD 128 …". */
function lengthBytes(length: number): number[] {
  const bytes: number[] = [];
  let rest = length;
  do {
    let digit = rest % 128;
    rest = Math.floor(rest / 128);
    if (rest > 0) digit |= 128;
    bytes.push(digit);
  } while (rest > 0);
  return bytes;
}

describe('PacketFollower', () => {
  // MQTT 3.1.1, table 2.4: the borders of one, two, three and four bytes.
  it.each([
    [0, [0x00]],
    [127, [0x7f]],
    [128, [0x80, 0x01]],
    [16_383, [0xff, 0x7f]],
    [16_384, [0x80, 0x80, 0x01]],
    [2_097_151, [0xff, 0xff, 0x7f]],
    [2_097_152, [0x80, 0x80, 0x80, 0x01]],
    [268_435_455, [0xff, 0xff, 0xff, 0x7f]],
  ])('reads the remaining length %i of table 2.4', (length, bytes) => {
    expect(followed([Uint8Array.of(0x30, ...bytes)]).begun).toEqual([[3, length]]);
    expect(lengthBytes(length)).toEqual(bytes);
  });

  it('calls a length of more than four bytes no MQTT, and none of four', () => {
    expect(followed([Uint8Array.of(0x30, 0xff, 0xff, 0xff, 0x80)]).sound).toBe(false);
    expect(followed([Uint8Array.of(0x30, 0xff, 0xff, 0xff, 0x7f)]).sound).toBe(true);
  });

  it('finds the same packets however the stream is cut', () => {
    const packet = fc.record({
      type: fc.integer({ min: 1, max: 14 }),
      length: fc.oneof(fc.integer({ min: 0, max: 5 }), fc.integer({ min: 120, max: 300 }), fc.constant(16_384)),
    });
    const cuts = fc.array(fc.nat(), { maxLength: 40 });
    fc.assert(
      fc.property(fc.array(packet, { minLength: 1, maxLength: 12 }), cuts, (packets, at) => {
        const parts = packets.map(({ type, length }) =>
          Buffer.concat([Buffer.from([type << 4, ...lengthBytes(length)]), Buffer.alloc(length, 0xff)]),
        );
        const stream = Buffer.concat(parts);
        const places = [0, ...at.map((one) => one % (stream.length + 1)), stream.length].toSorted((a, b) => a - b);
        const chunks = places.slice(1).map((end, i) => stream.subarray(places[i], end));
        const { begun, ends, sound } = followed(chunks);
        expect(sound).toBe(true);
        expect(begun).toEqual(packets.map(({ type, length }) => [type, length]));
        let end = 0;
        expect(ends).toEqual(parts.map(({ length }) => (end += length)));
      }),
      { numRuns: 300, seed: 20_261 },
    );
  });
});
