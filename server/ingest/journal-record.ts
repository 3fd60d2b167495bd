import { BLOCK_LIMITS } from '#core/contract/block.ts';
import type { Micros } from '#core/contract/time.ts';
import { crc32c } from './crc32c.ts';

/** A message as it came in. */
export interface JournalRecord {
  /** When it arrived, by the server's clock. */
  receivedMicros: Micros;
  topic: string;
  payload: Uint8Array;
}

/**
 * Layout of a segment file, all little-endian:
 *
 *   header   8 bytes "SPANJRN1", u64 µs when the segment was begun
 *   record   u32 mark, u32 length of the body, u32 CRC-32C of length and body, body
 *   body     u64 µs received, u16 length of the topic, topic in UTF-8, payload
 */
export const SEGMENT_HEADER_BYTES = 16;
const SEGMENT_MAGIC = Buffer.from('SPANJRN1', 'latin1');

const RECORD_HEADER_BYTES = 12;
const BODY_FIXED_BYTES = 10;
/** Where reading looks for the next record after damage: four bytes that neither text nor small numbers make. */
const MARK = 0xd5_b6_a9_f1;
const MARK_BYTES = Buffer.from([0xf1, 0xa9, 0xb6, 0xd5]);
const LIMIT_TOPIC_BYTES = 65_535;
const LIMIT_BODY_BYTES = BODY_FIXED_BYTES + LIMIT_TOPIC_BYTES + BLOCK_LIMITS.bytes;

export function segmentHeader(begunMicros: Micros): Buffer {
  const header = Buffer.alloc(SEGMENT_HEADER_BYTES);
  SEGMENT_MAGIC.copy(header);
  header.writeBigUInt64LE(BigInt(begunMicros), 8);
  return header;
}

/** When the segment was begun; null where the header is damaged or cut. */
export function readSegmentHeader(bytes: Buffer): Micros | null {
  if (bytes.length < SEGMENT_HEADER_BYTES || !bytes.subarray(0, 8).equals(SEGMENT_MAGIC)) return null;
  const begun = Number(bytes.readBigUInt64LE(8));
  return Number.isSafeInteger(begun) ? begun : null;
}

export function recordBytes({ topic, payload }: JournalRecord): number {
  return RECORD_HEADER_BYTES + BODY_FIXED_BYTES + Buffer.byteLength(topic) + payload.length;
}

/** Writes a record of `recordBytes` bytes at a place in a buffer; returns where it ends. */
export function writeRecord({ receivedMicros, topic, payload }: JournalRecord, into: Buffer, at: number): number {
  const bodyAt = at + RECORD_HEADER_BYTES;
  const topicBytes = into.write(topic, bodyAt + BODY_FIXED_BYTES, 'utf8');
  into.writeBigUInt64LE(BigInt(receivedMicros), bodyAt);
  into.writeUInt16LE(topicBytes, bodyAt + 8);
  into.set(payload, bodyAt + BODY_FIXED_BYTES + topicBytes);
  const end = bodyAt + BODY_FIXED_BYTES + topicBytes + payload.length;
  into.writeUInt32LE(MARK, at);
  into.writeUInt32LE(end - bodyAt, at + 4);
  into.writeUInt32LE(checksum(into, at, end), at + 8);
  return end;
}

/** Whether a record can be written at all. */
export function isRecordable({ receivedMicros, topic, payload }: JournalRecord): boolean {
  return (
    Number.isSafeInteger(receivedMicros) &&
    receivedMicros >= 0 &&
    Buffer.byteLength(topic) <= LIMIT_TOPIC_BYTES &&
    payload.length <= BLOCK_LIMITS.bytes
  );
}

/** What lies in a segment from one place on. */
export type Found =
  | { kind: 'record'; at: number; end: number; record: JournalRecord }
  /** Bytes that are no record, up to the next that is one. */
  | { kind: 'damage'; at: number; end: number }
  /** Bytes that are no record, up to the end. */
  | { kind: 'tail'; at: number; end: number };

/**
 * Goes through a segment's bytes record by record; after damage it looks for the next mark that a whole, checked
 * record follows. The records' payloads are views into the bytes.
 */
export function* findRecords(segment: Buffer, from: number): Generator<Found> {
  let at = from;
  while (at < segment.length) {
    const record = recordAt(segment, at);
    if (record !== null) {
      yield record;
      at = record.end;
      continue;
    }
    const next = nextRecord(segment, at + 1);
    yield { kind: next === null ? 'tail' : 'damage', at, end: next ?? segment.length };
    if (next === null) return;
    at = next;
  }
}

function recordAt(segment: Buffer, at: number): Extract<Found, { kind: 'record' }> | null {
  const bodyAt = at + RECORD_HEADER_BYTES;
  if (bodyAt + BODY_FIXED_BYTES > segment.length || segment.readUInt32LE(at) !== MARK) return null;
  const length = segment.readUInt32LE(at + 4);
  const end = bodyAt + length;
  if (length < BODY_FIXED_BYTES || length > LIMIT_BODY_BYTES || end > segment.length) return null;
  if (segment.readUInt32LE(at + 8) !== checksum(segment, at, end)) return null;
  const payloadAt = bodyAt + BODY_FIXED_BYTES + segment.readUInt16LE(bodyAt + 8);
  if (payloadAt > end) return null;
  const record = {
    receivedMicros: Number(segment.readBigUInt64LE(bodyAt)),
    topic: segment.toString('utf8', bodyAt + BODY_FIXED_BYTES, payloadAt),
    payload: segment.subarray(payloadAt, end),
  };
  return { kind: 'record', at, end, record };
}

function nextRecord(segment: Buffer, from: number): number | null {
  for (let at = segment.indexOf(MARK_BYTES, from); at !== -1; at = segment.indexOf(MARK_BYTES, at + 1)) {
    if (recordAt(segment, at) !== null) return at;
  }
  return null;
}

/** Over the length and the body. */
function checksum(segment: Buffer, at: number, end: number): number {
  return crc32c(segment.subarray(at + RECORD_HEADER_BYTES, end), crc32c(segment.subarray(at + 4, at + 8)));
}
