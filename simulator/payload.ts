import type { Micros } from '#core/contract/time.ts';

/** Samples as they go over the wire: 32-bit floats, or whole counts where the sensor's scale makes values of them. */
export type WireSamples = Float32Array | Int16Array | Int32Array;

/** Tags of RFC 8746 for little-endian arrays: binary32, signed 16 and 32 bit. */
const TAGS = { float32: 85, int16: 77, int32: 78 } as const;

const MAJOR = { unsigned: 0, negative: 1, bytes: 2, text: 3, map: 5, tag: 6 } as const;

/**
 * A `samples` payload as a logger sends it: a CBOR map of start (µs), rate (Hz), seq and channels, each channel a typed
 * array of RFC 8746, little-endian.
 *
 * @param channels name in the payload → samples
 */
export function samplesPayload(message: {
  startMicros: Micros;
  rateHz: number;
  sequence: number | null;
  channels: ReadonlyMap<string, WireSamples>;
}): Buffer {
  const { startMicros, rateHz, sequence, channels } = message;
  const parts: Uint8Array[] = [head(MAJOR.map, sequence === null ? 3 : 4)];
  parts.push(text('start'), number(startMicros), text('rate'), number(rateHz));
  if (sequence !== null) parts.push(text('seq'), number(sequence));
  parts.push(text('channels'), head(MAJOR.map, channels.size));
  for (const [name, samples] of channels) parts.push(text(name), ...typedArray(samples));
  return Buffer.concat(parts);
}

/** A SenML pack (RFC 8428, JSON) of single readings. */
export function senmlPayload(
  readings: readonly { name: string; unit: string; value: number; micros: Micros }[],
): Buffer {
  const records = readings.map(({ name, unit, value, micros }) => ({ n: name, u: unit, v: value, t: micros / 1e6 }));
  return Buffer.from(JSON.stringify(records));
}

function typedArray(samples: WireSamples): Uint8Array[] {
  const kind = samples instanceof Float32Array ? 'float32' : samples instanceof Int16Array ? 'int16' : 'int32';
  // Little-endian as in memory on every machine that Node runs on.
  const bytes = new Uint8Array(samples.buffer, samples.byteOffset, samples.byteLength);
  return [head(MAJOR.tag, TAGS[kind]), head(MAJOR.bytes, bytes.length), bytes];
}

function text(value: string): Uint8Array {
  const bytes = Buffer.from(value);
  return Buffer.concat([head(MAJOR.text, bytes.length), bytes]);
}

function number(value: number): Uint8Array {
  if (Number.isSafeInteger(value)) return value >= 0 ? head(MAJOR.unsigned, value) : head(MAJOR.negative, -1 - value);
  const bytes = Buffer.alloc(9);
  bytes[0] = 0xfb; // binary64
  bytes.writeDoubleBE(value, 1);
  return bytes;
}

/** First bytes of an item: major type and argument (RFC 8949, 3). */
function head(major: number, argument: number): Uint8Array {
  const type = major << 5;
  if (argument < 24) return Uint8Array.of(type | argument);
  if (argument < 0x100) return Uint8Array.of(type | 24, argument);
  const bytes = Buffer.alloc(argument < 0x10000 ? 3 : argument < 0x1_0000_0000 ? 5 : 9);
  bytes[0] = type | (bytes.length === 3 ? 25 : bytes.length === 5 ? 26 : 27);
  if (bytes.length === 3) bytes.writeUInt16BE(argument, 1);
  else if (bytes.length === 5) bytes.writeUInt32BE(argument, 1);
  else bytes.writeBigUInt64BE(BigInt(argument), 1);
  return bytes;
}
