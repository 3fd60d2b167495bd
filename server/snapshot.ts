import { mkdir, open, readFile, rename, rm } from 'node:fs/promises';
import { dirname, join } from 'node:path';
import { deserialize, serialize } from 'node:v8';
import { crc32 } from 'node:zlib';
import type { SensorHealth } from '#core/contract/health.ts';
import { accept, refuse, type Result } from '#core/contract/errors.ts';
import type { Micros } from '#core/contract/time.ts';
import type { Position } from './ingest/journal.ts';

/** What the main thread knows of a bridge, which no pipeline does. */
export interface BridgeMemory {
  /** Newest sample of each logger. */
  loggers: Record<string, Micros>;
  sensors: SensorHealth[];
}

/** The state of one bridge at a place in the journal: whatever came after that place is taken from the journal again. */
export interface Snapshot extends BridgeMemory {
  bridge: string;
  pipelineVersion: string;
  definitionVersion: number;
  /** The newest record that is in the state; null where the journal was empty. */
  position: Position | null;
  /** The newest record at which nothing was under way: a pipeline of another version begins there. */
  quietPosition: Position | null;
  /** The pipeline's state as the worker serialised it. */
  state: Uint8Array;
}

/**
 * A snapshot file: 8 bytes "SPANSNP1", u32 little-endian CRC-32 (ISO 3309) of the rest, the rest by the structured clone
 * algorithm. It is written aside, synced and renamed, so that a file under its name is whole unless the disk damages it.
 */
const MAGIC = Buffer.from('SPANSNP1', 'latin1');

export async function writeSnapshot(folder: string, snapshot: Snapshot): Promise<void> {
  const body = serialize(snapshot);
  const head = Buffer.alloc(MAGIC.length + 4);
  MAGIC.copy(head);
  head.writeUInt32LE(crc32(body), MAGIC.length);
  const path = pathOf(folder, snapshot.bridge);
  await mkdir(dirname(path), { recursive: true });
  const aside = `${path}.new`;
  const file = await open(aside, 'w');
  try {
    await file.writev([head, body]);
    await file.sync();
  } finally {
    await file.close();
  }
  await rename(aside, path);
}

/** @returns null where there is none; SNAPSHOT_UNUSABLE where there is one that cannot be read */
export async function readSnapshot(folder: string, bridge: string): Promise<Result<Snapshot | null>> {
  const path = pathOf(folder, bridge);
  let bytes: Buffer;
  try {
    bytes = await readFile(path);
  } catch (failure) {
    if ((failure as NodeJS.ErrnoException).code === 'ENOENT') return accept(null);
    return refuse('SNAPSHOT_UNUSABLE', String(failure), path);
  }
  const body = bytes.subarray(MAGIC.length + 4);
  if (bytes.length < MAGIC.length + 4 || !bytes.subarray(0, MAGIC.length).equals(MAGIC)) {
    return refuse('SNAPSHOT_UNUSABLE', 'not a snapshot file', path);
  }
  if (bytes.readUInt32LE(MAGIC.length) !== crc32(body))
    return refuse('SNAPSHOT_UNUSABLE', 'its checksum differs', path);
  try {
    return accept(deserialize(body) as Snapshot);
  } catch (failure) {
    return refuse('SNAPSHOT_UNUSABLE', String(failure), path);
  }
}

export async function removeSnapshot(folder: string, bridge: string): Promise<void> {
  await rm(pathOf(folder, bridge), { force: true });
}

const pathOf = (folder: string, bridge: string): string => join(folder, `${bridge}.snapshot`);
