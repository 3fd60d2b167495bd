import { join } from 'node:path';
import { counted } from '#core/contract/counted.ts';
import { SpanbeatError, type ErrorCode } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { Report } from '../report.ts';
import { nodeFiles, type JournalFiles, type OpenFile } from './journal-files.ts';
import {
  findRecords,
  isRecordable,
  readSegmentHeader,
  recordBytes,
  SEGMENT_HEADER_BYTES,
  segmentHeader,
  writeRecord,
  type JournalRecord,
} from './journal-record.ts';

/** Where a record begins. Later records have later positions, over restarts and failures too. */
export interface Position {
  segment: number;
  offset: number;
}

/** Negative where `a` lies before `b`. */
export function comparePositions(a: Position, b: Position): number {
  return a.segment - b.segment || a.offset - b.offset;
}

export interface Appended {
  /** Known at once, since appending keeps the order of the calls; null where the record was refused at once. */
  position: Position | null;
  /** Resolves when the record is on the disk; rejects with a SpanbeatError when it could not be written. */
  durable: Promise<void>;
}

export interface JournalStatus {
  bytes: number;
  oldestMicros: Micros | null;
  /** The last write failed. */
  full: boolean;
}

export interface Journal {
  append(record: JournalRecord): Appended;
  /** All durable records after a position (or from the oldest), in order, up to the newest when it gets there. */
  readFrom(after: Position | null): AsyncIterable<{ position: Position; record: JournalRecord }>;
  /** Position of the newest durable record of this run; null before the first. */
  newest(): Position | null;
  status(): JournalStatus;
  /** Writes what was appended, then closes. */
  close(): Promise<void>;
}

export interface JournalOptions {
  /** Oldest segments are deleted beyond either. */
  maxBytes: number;
  maxHours: number;
  clock: () => Micros;
  report: Report;
  files?: JournalFiles;
}

const MICROS_PER_HOUR = 3600 * MICROS_PER_SECOND;
/** Appended and not yet written; more is refused with MESSAGE_RATE_LIMIT. */
export const LIMIT_QUEUED_BYTES = 64 * 1024 * 1024;
const BATCH_BYTES = 8 * 1024 * 1024;
const SEGMENT_BYTES = { least: 256 * 1024, most: 32 * 1024 * 1024 };
/** Segments kept aside after damage; further ones are reported only. */
const LIMIT_ASIDE = 8;
const NAME = /^(\d{10})\.journal$/;

/**
 * Opens the journal of a folder: finds its segments and cuts off what a crash left unfinished at the end.
 *
 * Each opening, and each failed write, begins a new segment, so that a position that was handed out is never used for
 * another record. A failed write rejects everything that waits; the next append tries again.
 *
 * @throws SpanbeatError JOURNAL_WRITE or DISK_FULL where the folder cannot be used
 */
export async function openJournal(folder: string, options: JournalOptions): Promise<Journal> {
  const files = options.files ?? nodeFiles;
  try {
    await files.makeFolder(folder);
    const segments = await findSegments(folder, files, options);
    return new SegmentJournal(folder, segments, files, options);
  } catch (error) {
    throw writeFailure(error, folder);
  }
}

interface Segment {
  number: number;
  begunMicros: Micros;
  /** Durable bytes; readers go no further. */
  bytes: number;
}

interface Waiting {
  record: JournalRecord;
  position: Position;
  resolve: () => void;
  reject: (error: Error) => void;
}

class SegmentJournal implements Journal {
  readonly #folder: string;
  readonly #files: JournalFiles;
  readonly #options: JournalOptions;
  readonly #segmentBytes: number;
  readonly #segments: Segment[];
  /** Where the next record goes, and since when its segment is promised. */
  #next: Position;
  #nextBegunMicros: Micros;
  #current: { number: number; file: OpenFile } | null = null;
  #queue: Waiting[] = [];
  #queuedBytes = 0;
  #committing: Promise<void> | null = null;
  #newest: Position | null = null;
  #full = false;
  #closed = false;

  constructor(folder: string, segments: Segment[], files: JournalFiles, options: JournalOptions) {
    this.#folder = folder;
    this.#files = files;
    this.#options = options;
    this.#segments = segments;
    this.#segmentBytes = Math.min(Math.max(options.maxBytes / 16, SEGMENT_BYTES.least), SEGMENT_BYTES.most);
    this.#nextBegunMicros = options.clock();
    this.#next = { segment: segments.at(-1)?.number ?? 0, offset: SEGMENT_HEADER_BYTES };
    this.#nextSegment();
  }

  append(record: JournalRecord): Appended {
    const bytes = recordBytes(record);
    if (this.#closed) return refused('JOURNAL_WRITE', 'the journal is closed');
    if (!isRecordable(record)) return refused('MESSAGE_TOO_LARGE', `a record of ${bytes} bytes`);
    if (this.#queuedBytes + bytes > LIMIT_QUEUED_BYTES) {
      return refused('MESSAGE_RATE_LIMIT', `${this.#queuedBytes} bytes wait for the disk`);
    }
    const position = this.#place(bytes);
    const { promise, resolve, reject } = Promise.withResolvers<undefined>();
    this.#next.offset += bytes;
    this.#queuedBytes += bytes;
    this.#queue.push({ record, position, resolve: () => resolve(undefined), reject });
    this.#committing ??= this.#commit();
    return { position, durable: promise };
  }

  async *readFrom(after: Position | null): AsyncGenerator<{ position: Position; record: JournalRecord }> {
    let number = after?.segment ?? 0;
    while (true) {
      const segment = this.#segments.find((one) => one.number >= number);
      if (segment === undefined) return;
      number = segment.number;
      let offset = after?.segment === number ? after.offset : SEGMENT_HEADER_BYTES;
      // The newest segment grows while it is read: it is left when nothing durable is new in it.
      while (offset < segment.bytes) {
        const bytes = await this.#readSegment(segment);
        if (bytes === null) break;
        for (const found of findRecords(bytes, offset)) {
          offset = found.end;
          if (found.kind !== 'record') await this.#keepAside(number, found.at, found.end);
          else if (after?.segment !== number || found.at > after.offset) {
            yield { position: { segment: number, offset: found.at }, record: found.record };
          }
        }
      }
      number += 1;
    }
  }

  newest(): Position | null {
    return this.#newest;
  }

  status(): JournalStatus {
    return {
      bytes: this.#segments.reduce((sum, { bytes }) => sum + bytes, 0),
      oldestMicros: this.#segments[0]?.begunMicros ?? null,
      full: this.#full,
    };
  }

  async close(): Promise<void> {
    this.#closed = true;
    await this.#committing;
    const file = this.#current?.file;
    this.#current = null;
    await file?.close();
  }

  /** Where a record of so many bytes will go; begins a new segment when this one is full or old. */
  #place(bytes: number): Position {
    const now = this.#options.clock();
    const begun = this.#next.offset > SEGMENT_HEADER_BYTES;
    const old = now - this.#nextBegunMicros > (this.#options.maxHours * MICROS_PER_HOUR) / 24;
    if (begun && (old || this.#next.offset + bytes > this.#segmentBytes)) this.#nextSegment();
    if (this.#next.offset === SEGMENT_HEADER_BYTES) this.#nextBegunMicros = now;
    return { ...this.#next };
  }

  /** Numbers follow the clock in seconds, so that one whose file never came to be is not used again after a restart. */
  #nextSegment(): void {
    this.#nextBegunMicros = this.#options.clock();
    const number = Math.max(this.#next.segment + 1, Math.floor(this.#nextBegunMicros / MICROS_PER_SECOND));
    this.#next = { segment: number, offset: SEGMENT_HEADER_BYTES };
  }

  /** Writes batch after batch until nothing waits. What is appended during one write and sync shares the next. */
  async #commit(): Promise<void> {
    // Let the rest of the messages that came in one read be appended first.
    await new Promise((resolve) => setImmediate(resolve));
    while (this.#queue.length > 0) {
      const batch = this.#takeBatch();
      try {
        await this.#write(batch);
      } catch (error) {
        await this.#giveUp(batch, error);
        continue;
      }
      this.#full = false;
      for (const { resolve } of batch) resolve();
      await this.#trim();
    }
    this.#committing = null;
  }

  /** The records at the head of the queue that go into one segment and one write. */
  #takeBatch(): Waiting[] {
    const segment = this.#queue[0]!.position.segment;
    let bytes = 0;
    let count = 0;
    for (const { record, position } of this.#queue) {
      if (position.segment !== segment || (count > 0 && bytes + recordBytes(record) > BATCH_BYTES)) break;
      bytes += recordBytes(record);
      count += 1;
    }
    this.#queuedBytes -= bytes;
    return this.#queue.splice(0, count);
  }

  async #write(batch: readonly Waiting[]): Promise<void> {
    const first = batch[0]!.position;
    const bytes = Buffer.allocUnsafe(batch.reduce((sum, { record }) => sum + recordBytes(record), 0));
    let at = 0;
    for (const { record } of batch) at = writeRecord(record, bytes, at);
    const file = await this.#fileOf(first.segment);
    await writeAll(file, bytes, first.offset);
    await file.sync();
    this.#segments.at(-1)!.bytes = first.offset + bytes.length;
    this.#newest = batch.at(-1)!.position;
  }

  async #fileOf(number: number): Promise<OpenFile> {
    if (this.#current?.number === number) return this.#current.file;
    await this.#current?.file.close();
    this.#current = null;
    const begunMicros = this.#options.clock();
    const file = await this.#files.create(this.#path(number));
    // Known from here on, so that it is trimmed and removed like the others even if its first write fails.
    this.#current = { number, file };
    this.#segments.push({ number, begunMicros, bytes: 0 });
    await writeAll(file, segmentHeader(begunMicros), 0);
    await file.sync();
    await this.#files.syncFolder(this.#folder);
    this.#segments.at(-1)!.bytes = SEGMENT_HEADER_BYTES;
    return file;
  }

  /**
   * After a failed write or sync nobody knows what of it is on the disk, and a second sync may lie: the segment is
   * cut back to what was durable and not used again. All that waits is refused, for its places are now wrong.
   */
  async #giveUp(batch: readonly Waiting[], error: unknown): Promise<void> {
    const refused = [...batch, ...this.#queue];
    this.#queue = [];
    this.#queuedBytes = 0;
    this.#nextSegment();
    const current = this.#current;
    this.#current = null;
    if (current !== null) {
      const durable = this.#segments.at(-1)!.bytes;
      // Best effort: what stays behind is a cut tail, which reading knows how to leave out.
      await current.file.truncate(durable).catch(() => undefined);
      await current.file.close().catch(() => undefined);
      if (durable < SEGMENT_HEADER_BYTES) {
        this.#segments.pop();
        await this.#files.remove(this.#path(current.number)).catch(() => undefined);
      }
    }
    const failure = writeFailure(error, this.#folder);
    if (!this.#full) this.#options.report({ code: failure.code, where: this.#folder, detail: told(error) });
    this.#full = true;
    for (const { reject } of refused) reject(failure);
  }

  async #trim(): Promise<void> {
    const oldestKept = this.#options.clock() - this.#options.maxHours * MICROS_PER_HOUR;
    let bytes = this.status().bytes;
    while (this.#segments.length > 1) {
      const [oldest, second] = this.#segments as [Segment, Segment];
      if (bytes <= this.#options.maxBytes && second.begunMicros >= oldestKept) return;
      const why = bytes > this.#options.maxBytes ? `${bytes} bytes` : `older than ${this.#options.maxHours} h`;
      this.#segments.shift();
      bytes -= oldest.bytes;
      try {
        await this.#files.remove(this.#path(oldest.number));
        this.#options.report({ code: 'JOURNAL_TRIMMED', where: name(oldest.number), detail: why });
      } catch (error) {
        this.#options.report({ code: 'JOURNAL_WRITE', where: name(oldest.number), detail: told(error) });
      }
    }
  }

  /** Null where it was trimmed meanwhile, or where the disk no longer gives it: that must not cost the others. */
  async #readSegment({ number, bytes }: Segment): Promise<Buffer | null> {
    try {
      return await this.#files.read(this.#path(number), bytes);
    } catch (error) {
      if (errno(error) === 'ENOENT') return null;
      if (errno(error) !== 'EIO') throw error;
      const detail = `the disk does not give it: ${told(error)}`;
      this.#options.report({ code: 'JOURNAL_CORRUPT', where: name(number), detail });
      return null;
    }
  }

  async #keepAside(number: number, from: number, to: number): Promise<void> {
    const kept = await keepAside(this.#folder, number, this.#files);
    const detail = `bytes ${from} to ${to} are no records${kept ? '; a copy is kept in damaged/' : ''}`;
    this.#options.report({ code: 'JOURNAL_CORRUPT', where: name(number), detail });
  }

  #path(number: number): string {
    return join(this.#folder, name(number));
  }
}

function refused(code: ErrorCode, detail: string): Appended {
  return { position: null, durable: Promise.reject(new SpanbeatError({ code, detail })) };
}

const name = (number: number): string => `${String(number).padStart(10, '0')}.journal`;

/** The segments of the folder, oldest first. Only the newest can have an unfinished end: it is cut off. */
async function findSegments(folder: string, files: JournalFiles, { report }: JournalOptions): Promise<Segment[]> {
  const numbers = (await files.list(folder)).flatMap((file) => NAME.exec(file)?.[1] ?? []).map(Number);
  numbers.sort((a, b) => a - b);
  const segments: Segment[] = [];
  for (const number of numbers) {
    const path = join(folder, name(number));
    const { header, bytes } = await surveyed(path, number === numbers.at(-1), files, report);
    // A damaged header costs only the time, which the number tells to the second; the records are found by their marks.
    const begunMicros = header ?? Math.max(segments.at(-1)?.begunMicros ?? 0, number * MICROS_PER_SECOND);
    segments.push({ number, begunMicros, bytes });
  }
  return segments;
}

/** A segment that the disk no longer gives must not keep the others from being used; reading leaves it out. */
async function surveyed(
  path: string,
  newest: boolean,
  files: JournalFiles,
  report: Report,
): Promise<{ header: Micros | null; bytes: number }> {
  try {
    const header = readSegmentHeader(await files.read(path, SEGMENT_HEADER_BYTES));
    return { header, bytes: newest ? await cutTail(path, files, report) : await files.size(path) };
  } catch (error) {
    if (errno(error) !== 'EIO') throw error;
    report({ code: 'JOURNAL_CORRUPT', where: path, detail: `the disk does not give it: ${told(error)}` });
    return { header: null, bytes: await files.size(path) };
  }
}

/** Cuts off bytes at the end that are no record; returns how many are left. */
async function cutTail(path: string, files: JournalFiles, report: Report): Promise<number> {
  const bytes = await files.read(path);
  let end = Math.min(bytes.length, SEGMENT_HEADER_BYTES);
  for (const found of findRecords(bytes, SEGMENT_HEADER_BYTES)) {
    if (found.kind === 'tail') {
      await files.truncate(path, found.at);
      report({
        code: 'JOURNAL_TAIL',
        where: path,
        detail: `${counted(found.end - found.at, 'byte')} after byte ${found.at} cut off`,
      });
      return found.at;
    }
    end = found.end;
  }
  return end;
}

/** Copies a segment once, while there is room for it. */
async function keepAside(folder: string, number: number, files: JournalFiles): Promise<boolean> {
  const aside = join(folder, 'damaged');
  try {
    await files.makeFolder(aside);
    const kept = await files.list(aside);
    if (kept.includes(name(number))) return true;
    if (kept.length >= LIMIT_ASIDE) return false;
    await files.copy(join(folder, name(number)), join(aside, name(number)));
    return true;
  } catch {
    return false; // the copy is a courtesy; the complaint says that there is none
  }
}

async function writeAll(file: OpenFile, bytes: Uint8Array, position: number): Promise<void> {
  let at = 0;
  while (at < bytes.length) {
    const written = await file.write(bytes.subarray(at), position + at);
    if (written === 0) throw new Error('the disk took no bytes');
    at += written;
  }
}

function writeFailure(error: unknown, where: string): SpanbeatError {
  const code: ErrorCode = ['ENOSPC', 'EDQUOT'].includes(errno(error) ?? '') ? 'DISK_FULL' : 'JOURNAL_WRITE';
  return new SpanbeatError({ code, where, detail: told(error) });
}

const errno = (error: unknown): string | undefined =>
  error instanceof Error ? (error as NodeJS.ErrnoException).code : undefined;

const told = (error: unknown): string => (error instanceof Error ? error.message : String(error));
