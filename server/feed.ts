import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Micros } from '#core/contract/time.ts';
import { PIPELINE_VERSION } from '#core/passage/pipeline.ts';
import { comparePositions, type Position } from './ingest/journal.ts';
import type { Snapshot } from './snapshot.ts';
import type { Thread } from './thread.ts';

/** How far one bridge has been fed, and from where it can be fed again. */
export interface Feed {
  bridge: string;
  definition: BridgeDefinition;
  version: number;
  thread: Thread;
  /** While false, live blocks are left out: they are taken from the journal. */
  live: boolean;
  /** Counts the pipelines it has had: whoever feeds an earlier one stops. */
  generation: number;
  /** The newest live block that was left out. */
  skippedTo: Position | null;
  /** Up to here its snapshot had taken the journal. */
  openedAt: Position | null;
  /** The newest block that went in, and the newest that came out with no passage open. */
  through: Position | null;
  quietPosition: Position | null;
  inFlight: { position: Position; bytes: number; postedMs: number }[];
  replaysInFlight: number;
  newestMicros: Micros;
  /** All that followed from what came out so far is durable. */
  durable: Promise<void>;
  snapshot: { token: number; position: Position | null } | null;
  snapshotMicros: Micros;
  snapshotAtMs: number;
  failedAt: Position | null;
  poison: Position[];
}

export function newFeed(definition: BridgeDefinition, version: number, thread: Thread): Feed {
  return {
    bridge: definition.id,
    definition,
    version,
    thread,
    live: false,
    generation: 0,
    skippedTo: null,
    through: null,
    openedAt: null,
    quietPosition: null,
    inFlight: [],
    replaysInFlight: 0,
    newestMicros: 0,
    durable: Promise.resolve(),
    snapshot: null,
    snapshotMicros: 0,
    snapshotAtMs: -Infinity,
    failedAt: null,
    poison: [],
  };
}

/** Why a snapshot is not this pipeline's, or null. */
export function mismatchOf({ pipelineVersion, definitionVersion }: Snapshot, feed: Feed): string | null {
  if (pipelineVersion !== PIPELINE_VERSION) return `of pipeline ${pipelineVersion}, this is ${PIPELINE_VERSION}`;
  if (definitionVersion !== feed.version) return `of definition ${definitionVersion}, this is ${feed.version}`;
  return null;
}

/** Null where any is: then the journal is read from its beginning. */
export function oldest(positions: readonly (Position | null)[]): Position | null {
  return positions.reduce((a, b) => (a === null || b === null ? null : comparePositions(a, b) <= 0 ? a : b));
}

/** Nothing lies before null. */
export function isAfter(a: Position | null, b: Position | null): boolean {
  return a !== null && (b === null || comparePositions(a, b) > 0);
}

export function newer(a: Position | null, b: Position | null): Position | null {
  if (a === null || b === null) return a ?? b;
  return comparePositions(a, b) >= 0 ? a : b;
}
