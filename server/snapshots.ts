import type { Complaint } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import { PIPELINE_VERSION } from '#core/passage/pipeline.ts';
import { newer, type Feed } from './feed.ts';
import type { Position } from './ingest/journal.ts';
import { writeSnapshot, type BridgeMemory, type Snapshot } from './snapshot.ts';
import type { FromWorker, ToWorker } from './worker.ts';

/** A snapshot is taken after this much event time, but not more often than this by the wall clock. */
export interface SnapshotPace {
  snapshotEventS: number;
  snapshotWallMs: number;
}

export interface SnapshotsOptions {
  /** Where they are written. */
  folder: string;
  pace: SnapshotPace;
  /** The newest block that any live bridge was given. */
  through: () => Position | null;
  remember: (bridge: string) => BridgeMemory;
  report: (complaint: Complaint) => void;
}

/** A bridge whose data do not move gets a snapshot this often, so that its place in the journal moves on. */
export const IDLE_SNAPSHOT_MS = 600_000;

/**
 * Takes the snapshots of all bridges: asks the worker for the pipeline's state, adds what the main thread knows, and writes
 * both when all that followed from the blocks before is durable.
 */
export class Snapshots {
  readonly #options: SnapshotsOptions;
  readonly #writing = new Map<string, Promise<void>>();
  readonly #awaited = new Map<number, () => void>();
  #token = 0;
  #written = 0;

  constructor(options: SnapshotsOptions) {
    this.#options = options;
  }

  /** So many were written. */
  get written(): number {
    return this.#written;
  }

  takeWhenDue(feed: Feed): void {
    const { snapshotEventS, snapshotWallMs } = this.#options.pace;
    if (feed.snapshotMicros === 0) feed.snapshotMicros = feed.newestMicros;
    if (feed.newestMicros - feed.snapshotMicros < snapshotEventS * MICROS_PER_SECOND) return;
    if (performance.now() - feed.snapshotAtMs < snapshotWallMs) return;
    this.take(feed, false);
  }

  takeOfIdle(feeds: Iterable<Feed>): void {
    for (const feed of feeds) {
      if (feed.live && performance.now() - feed.snapshotAtMs > IDLE_SNAPSHOT_MS) this.take(feed, false);
    }
  }

  /** @param last also where one is on its way */
  take(feed: Feed, last: boolean): void {
    if (!last && (feed.snapshot !== null || this.#writing.has(feed.bridge))) return;
    const token = ++this.#token;
    // A live bridge has been given everything of its own up to the newest block of all.
    feed.snapshot = { token, position: feed.live ? newer(this.#options.through(), feed.through) : feed.through };
    feed.snapshotMicros = feed.newestMicros;
    feed.snapshotAtMs = performance.now();
    feed.thread.worker.postMessage({ kind: 'snapshot', bridge: feed.bridge, token } satisfies ToWorker);
  }

  /** The state that was asked for. */
  came(feed: Feed, { token, state, quiet }: Extract<FromWorker, { kind: 'snapshot' }>): void {
    if (feed.snapshot?.token !== token) return;
    const { position } = feed.snapshot;
    const snapshot: Snapshot = {
      bridge: feed.bridge,
      pipelineVersion: PIPELINE_VERSION,
      definitionVersion: feed.version,
      position,
      quietPosition: quiet ? position : feed.quietPosition,
      ...structuredClone(this.#options.remember(feed.bridge)),
      state,
    };
    this.#write(snapshot, feed.durable);
    this.giveUp(feed);
  }

  /** What was asked for has come, or comes no more. */
  giveUp(feed: Feed): void {
    const token = feed.snapshot?.token;
    feed.snapshot = null;
    if (token === undefined) return;
    this.#awaited.get(token)?.();
    this.#awaited.delete(token);
  }

  /** Resolves when what was asked for has come; it may still have to be written. */
  taken(feed: Feed): Promise<void> {
    const token = feed.snapshot?.token;
    return token === undefined ? Promise.resolve() : new Promise((resolve) => this.#awaited.set(token, resolve));
  }

  async allWritten(): Promise<void> {
    await Promise.all(this.#writing.values());
  }

  #write(snapshot: Snapshot, durable: Promise<void>): void {
    const { bridge } = snapshot;
    const { folder, report } = this.#options;
    const earlier = this.#writing.get(bridge);
    const writing = (async () => {
      await durable;
      // The last one may be asked for while another is still being written; it has the same file.
      await earlier;
      await writeSnapshot(folder, snapshot);
      this.#written += 1;
    })()
      // The older one and the journal still serve.
      .catch((failure: unknown) => report({ code: 'SNAPSHOT_WRITE', where: bridge, detail: String(failure) }))
      .finally(() => {
        if (this.#writing.get(bridge) === writing) this.#writing.delete(bridge);
      });
    this.#writing.set(bridge, writing);
  }
}
