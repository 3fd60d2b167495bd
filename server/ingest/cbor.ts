import { counted } from '#core/contract/counted.ts';
import { accept, refuse, type ErrorCode, type Result } from '#core/contract/errors.ts';

/**
 * A small CBOR reader (RFC 8949) for messages from outside. It is written for hostile input: depth, item count and
 * every length are checked against what is left of the message before anything is allocated, so its memory is at
 * most a small multiple of the message and its time linear in it. A general decoder gives no such promise, and
 * guarding one would need this walk anyway.
 *
 * Read: integers, floats of all sizes, strings, arrays, maps, indefinite lengths, the tags of LIMITS below. Refused:
 * duplicate keys (section 5.6), trailing bytes, reserved encodings, all other tags.
 */
export type Cbor =
  number | bigint | string | boolean | null | undefined | Uint8Array | Float64Array | TypedNumbers | Cbor[] | CborMap;

export type CborMap = Map<string | number, Cbor>;

/** An RFC 8746 typed array, still as its bytes: they are only turned into numbers where a sensor wants them. */
export interface TypedNumbers {
  tag: number;
  bytes: Uint8Array;
}

export const CBOR_LIMITS = { depth: 8, items: 2_000_000 } as const;

/** Self-described CBOR (RFC 8949 section 3.4.6): no meaning of its own. */
const TAG_SELF_DESCRIBED = 55_799;
/** Decimal fraction (section 3.4.4), which SenML allows for numbers (RFC 8428 section 6). */
const TAG_DECIMAL_FRACTION = 4;
const TAG_TYPED_FIRST = 64;
const TAG_TYPED_LAST = 87;

/**
 * Reads one CBOR data item that fills the whole message.
 *
 * An array whose items are all numbers comes as a Float64Array, a map as a Map with text or whole-number keys, an
 * integer beyond ±2^53 as a bigint.
 *
 * @example decodeCbor(Uint8Array.of(0x83, 1, 2, 3)) // { ok: true, value: Float64Array [1, 2, 3] }
 */
export function decodeCbor(message: Uint8Array): Result<Cbor> {
  const reader: Reader = {
    bytes: message,
    view: new DataView(message.buffer, message.byteOffset, message.byteLength),
    at: 0,
    items: 0,
  };
  try {
    const value = readItem(reader, 0);
    const left = message.length - reader.at;
    return left === 0
      ? accept(value)
      : refuse('MESSAGE_ENCODING', `${counted(left, 'byte')} after the end of the CBOR item`);
  } catch (fault) {
    if (fault instanceof CborFault) return refuse(fault.code, fault.message);
    throw fault;
  }
}

export function isTypedNumbers(value: Cbor): value is TypedNumbers {
  return typeof value === 'object' && value !== null && 'tag' in value;
}

interface Reader {
  bytes: Uint8Array;
  view: DataView;
  at: number;
  items: number;
}

class CborFault extends Error {
  readonly code: ErrorCode;

  constructor(code: ErrorCode, detail: string) {
    super(detail);
    this.code = code;
  }
}

const INDEFINITE = -1;
const BREAK = 0xff;

function readItem(reader: Reader, depth: number): Cbor {
  if (depth > CBOR_LIMITS.depth) throw new CborFault('MESSAGE_DEPTH', `nested deeper than ${CBOR_LIMITS.depth} levels`);
  count(reader);
  const initial = takeByte(reader);
  const major = initial >> 5;
  const info = initial & 31;
  switch (major) {
    case 0:
      return readArgument(reader, info);
    case 1: {
      const argument = readArgument(reader, info);
      return typeof argument === 'bigint' ? -1n - argument : -1 - argument;
    }
    case 2:
      return readString(reader, info, 2);
    case 3:
      return decodeText(readString(reader, info, 3));
    case 4:
      return readArray(reader, info, depth);
    case 5:
      return readMap(reader, info, depth);
    case 6:
      return readTagged(reader, info, depth);
    default:
      return readSimple(reader, info);
  }
}

function readArgument(reader: Reader, info: number): number | bigint {
  if (info < 24) return info;
  const size = argumentBytes(reader, info);
  const at = take(reader, size);
  switch (size) {
    case 1:
      return reader.view.getUint8(at);
    case 2:
      return reader.view.getUint16(at);
    case 4:
      return reader.view.getUint32(at);
    default: {
      const wide = reader.view.getBigUint64(at);
      return wide <= BigInt(Number.MAX_SAFE_INTEGER) ? Number(wide) : wide;
    }
  }
}

function argumentBytes(reader: Reader, info: number): number {
  if (info > 27) throw new CborFault('MESSAGE_ENCODING', `reserved length code ${info} at byte ${reader.at - 1}`);
  return 1 << (info - 24);
}

/** A length or count that the rest of the message can hold, each unit taking `unitBytes` at least. */
function readLength(reader: Reader, info: number, unitBytes: number): number {
  if (info === 31) return INDEFINITE;
  const length = readArgument(reader, info);
  const room = reader.bytes.length - reader.at;
  if (length > room / unitBytes) {
    throw new CborFault(
      'MESSAGE_TRUNCATED',
      `length ${length} at byte ${reader.at}, with ${counted(room, 'byte')} left`,
    );
  }
  return Number(length);
}

function readString(reader: Reader, info: number, major: number): Uint8Array {
  const length = readLength(reader, info, 1);
  if (length !== INDEFINITE) {
    const at = take(reader, length);
    return reader.bytes.subarray(at, at + length);
  }
  const chunks: Uint8Array[] = [];
  while (!takeBreak(reader)) {
    count(reader);
    const initial = takeByte(reader);
    if (initial >> 5 !== major || (initial & 31) === 31) {
      throw new CborFault('MESSAGE_ENCODING', `chunk of another type in a string at byte ${reader.at - 1}`);
    }
    const size = readLength(reader, initial & 31, 1);
    const at = take(reader, size);
    chunks.push(reader.bytes.subarray(at, at + size));
  }
  return concatenated(chunks);
}

function concatenated(chunks: readonly Uint8Array[]): Uint8Array {
  const whole = new Uint8Array(chunks.reduce((sum, chunk) => sum + chunk.length, 0));
  let at = 0;
  for (const chunk of chunks) {
    whole.set(chunk, at);
    at += chunk.length;
  }
  return whole;
}

const utf8 = new TextDecoder('utf-8', { fatal: true, ignoreBOM: true });

function decodeText(bytes: Uint8Array): string {
  try {
    return utf8.decode(bytes);
  } catch {
    throw new CborFault('MESSAGE_ENCODING', 'a text string is not valid UTF-8');
  }
}

function readArray(reader: Reader, info: number, depth: number): Cbor {
  const length = readLength(reader, info, 1);
  const items: Cbor[] = [];
  while (length === INDEFINITE ? !takeBreak(reader) : items.length < length) items.push(readItem(reader, depth + 1));
  return items.length > 0 && items.every((item) => typeof item === 'number') ? Float64Array.from(items) : items;
}

function readMap(reader: Reader, info: number, depth: number): CborMap {
  const length = readLength(reader, info, 2);
  const map: CborMap = new Map();
  while (length === INDEFINITE ? !takeBreak(reader) : map.size < length) {
    const key = readItem(reader, depth + 1);
    if (typeof key !== 'string' && typeof key !== 'number') {
      throw new CborFault(
        'MESSAGE_ENCODING',
        `a map key that is neither text nor a whole number, at byte ${reader.at}`,
      );
    }
    if (map.has(key)) throw new CborFault('MESSAGE_ENCODING', `key ${JSON.stringify(key)} occurs twice`);
    map.set(key, readItem(reader, depth + 1));
  }
  return map;
}

function readTagged(reader: Reader, info: number, depth: number): Cbor {
  const tag = readArgument(reader, info);
  const content = readItem(reader, depth + 1);
  if (tag === TAG_SELF_DESCRIBED) return content;
  if (tag === TAG_DECIMAL_FRACTION) return decimalFraction(content);
  if (typeof tag === 'number' && tag >= TAG_TYPED_FIRST && tag <= TAG_TYPED_LAST && content instanceof Uint8Array) {
    return { tag, bytes: content };
  }
  throw new CborFault('MESSAGE_SHAPE', `tag ${tag} is not part of the contract`);
}

function decimalFraction(content: Cbor): number {
  if (!(content instanceof Float64Array) || content.length !== 2 || !content.every(Number.isInteger)) {
    throw new CborFault('MESSAGE_SHAPE', 'a decimal fraction is not an array of two whole numbers');
  }
  // Through decimal text, so that the result is the double nearest to the decimal value.
  return Number(`${content[1]!}e${content[0]!}`);
}

function readSimple(reader: Reader, info: number): Cbor {
  switch (info) {
    case 20:
      return false;
    case 21:
      return true;
    case 22:
      return null;
    case 23:
      return undefined;
    case 25:
      return readHalf(reader.view.getUint16(take(reader, 2)));
    case 26:
      return reader.view.getFloat32(take(reader, 4));
    case 27:
      return reader.view.getFloat64(take(reader, 8));
    default:
      throw new CborFault('MESSAGE_ENCODING', `simple value ${info} at byte ${reader.at - 1} has no meaning here`);
  }
}

/** IEEE 754 binary16 from its bits, as in RFC 8949 appendix D. */
export function readHalf(bits: number): number {
  const exponent = (bits >> 10) & 31;
  const mantissa = bits & 1023;
  const sign = bits & 0x8000 ? -1 : 1;
  if (exponent === 0) return sign * mantissa * 2 ** -24;
  if (exponent === 31) return mantissa === 0 ? sign * Infinity : NaN;
  return sign * (mantissa + 1024) * 2 ** (exponent - 25);
}

function count(reader: Reader): void {
  reader.items += 1;
  if (reader.items > CBOR_LIMITS.items) {
    throw new CborFault('MESSAGE_TOO_LARGE', `more than ${CBOR_LIMITS.items} items; send samples as typed arrays`);
  }
}

function takeByte(reader: Reader): number {
  return reader.bytes[take(reader, 1)]!;
}

function takeBreak(reader: Reader): boolean {
  if (reader.bytes[reader.at] !== BREAK) return false;
  reader.at += 1;
  return true;
}

/** Moves on by `size` bytes; returns where they begin. */
function take(reader: Reader, size: number): number {
  const at = reader.at;
  if (at + size > reader.bytes.length) {
    throw new CborFault('MESSAGE_TRUNCATED', `ends at byte ${reader.bytes.length}, ${at + size} were announced`);
  }
  reader.at = at + size;
  return at;
}
