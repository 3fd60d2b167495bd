import { setImmediate as turn, setTimeout as sleep } from 'node:timers/promises';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Complaint } from '#core/contract/errors.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { sampleMicros, type Micros } from '#core/contract/time.ts';
import { isAfter, mismatchOf, newFeed, oldest, type Feed } from './feed.ts';
import { comparePositions, type Journal, type Position } from './ingest/journal.ts';
import type { JournalRecord } from './ingest/journal-record.ts';
import { sharedMs, type Stages } from './stages.ts';
import { readSnapshot, removeSnapshot, type BridgeMemory } from './snapshot.ts';
import { IDLE_SNAPSHOT_MS, Snapshots, type SnapshotPace } from './snapshots.ts';
import { heapBytesOf, newThread, newWorker, release, threadsFor, type Thread } from './thread.ts';
import type { BridgeOutput, FromWorker, ToWorker } from './worker.ts';

export interface PipelinesOptions {
  bridges: readonly { definition: BridgeDefinition; version: number }[];
  /** Folder of the snapshots. */
  folder: string;
  journal: Pick<Journal, 'readFrom' | 'newest'>;
  /** Blocks of a record of the journal. */
  decode: (record: JournalRecord) => SampleBlock[];
  /** A block is about to go in. `receivedMicros` is given where it comes out of the journal. */
  given: (block: SampleBlock, receivedMicros: Micros | null) => void;
  /**
   * What came out, in the order of the blocks of each bridge. The promise resolves when all that follows from it is
   * durable; a snapshot waits for that.
   *
   * @param replayed it came out of the journal
   */
  take: (bridge: string, output: PipelineOutput, replayed: boolean) => Promise<void> | null;
  remember: (bridge: string) => BridgeMemory;
  recall: (bridge: string, memory: BridgeMemory) => void;
  report: (complaint: Complaint) => void;
  /** Where what came out is made durable has no room: resolves when it has. Whoever feeds waits for it too. */
  room?: () => Promise<void> | null;
  /** Hears how long blocks take; those out of the journal are left out. */
  stages?: Pick<Stages, 'note'>;
  /** Threads; see `threadsFor`. */
  workers?: number;
  limits?: Partial<PipelineLimits>;
}

export interface PipelineLimits extends SnapshotPace {
  /** Blocks and bytes of samples that may wait for one worker; beyond, whoever feeds waits, which delays acknowledgements. */
  blocks: number;
  bytes: number;
}

export const PIPELINE_LIMITS: PipelineLimits = {
  blocks: 1024,
  bytes: 32 * 1024 * 1024,
  snapshotEventS: 60,
  snapshotWallMs: 5_000,
};

/** How long stopping waits for what is in hand. */
const STOP_MS = 10_000;
const PAUSE_MS = { first: 200, longest: 30_000 };
/** Records of the journal after which others get their turn. */
const RECORDS_A_TURN = 32;
/** Blocks that are left out because they made the pipeline fail; beyond, the oldest is tried again. */
const LIMIT_POISON = 100;

/** The pipelines of all bridges, spread over worker threads. */
export interface Pipelines {
  /** Hands a block on. Blocks come in the order of their positions. */
  feed(block: SampleBlock, position: Position): void;
  /** Resolves when every worker has room again: whoever feeds waits for it before it takes more. */
  room(): Promise<void>;
  /** Resolves when every bridge is abreast of the journal. */
  ready(): Promise<void>;
  /** Whether a bridge is still catching up from the journal. */
  recovering(bridge: string): boolean;
  /** Takes snapshots of all bridges and ends the threads. Idempotent. */
  stop(): Promise<void>;
  /** For tests and metrics. */
  figures(): { workers: number; blocksInFlight: number; snapshots: number; failures: number };
  /** What the threads have taken for their heaps. */
  heapBytes(): Promise<number>;
  /** Ends the thread of a bridge as a crash would; for tests. */
  crash(bridge: string): Promise<void>;
}

export function startPipelines(options: PipelinesOptions): Pipelines {
  return new PipelinePool(options);
}

class PipelinePool implements Pipelines {
  readonly #options: PipelinesOptions;
  readonly #limits: PipelineLimits;
  readonly #feeds = new Map<string, Feed>();
  readonly #threads: Thread[] = [];
  readonly #snapshots: Snapshots;
  readonly #recoveries = new Set<Promise<void>>();
  readonly #idle: NodeJS.Timeout;
  /** The newest block that any live bridge was given. */
  #through: Position | null = null;
  #failures = 0;
  #stopping: Promise<void> | null = null;
  readonly #stopped = Promise.withResolvers<undefined>();

  constructor(options: PipelinesOptions) {
    this.#options = options;
    this.#limits = { ...PIPELINE_LIMITS, ...options.limits };
    this.#snapshots = new Snapshots({ ...options, pace: this.#limits, through: () => this.#through });
    const threads = threadsFor(options.bridges.length, options.workers);
    for (let i = 0; i < threads; i++) this.#threads.push(this.#thread());
    for (const [index, { definition, version }] of options.bridges.entries()) {
      const thread = this.#threads[index % this.#threads.length]!;
      this.#feeds.set(definition.id, newFeed(definition, version, thread));
    }
    if (this.#feeds.size > 0) this.#track(this.#recover([...this.#feeds.values()]));
    this.#idle = setInterval(() => this.#snapshots.takeOfIdle(this.#feeds.values()), IDLE_SNAPSHOT_MS);
    this.#idle.unref();
  }

  feed(block: SampleBlock, position: Position): void {
    const feed = this.#feeds.get(block.bridge);
    if (feed === undefined || this.#stopping !== null) return;
    if (!feed.live) {
      feed.skippedTo = position;
      return;
    }
    this.#through = position;
    this.#dispatch(feed, block, position, null);
  }

  async room(): Promise<void> {
    for (const thread of this.#threads) await this.#room(thread);
    await this.#lastingRoom();
  }

  async ready(): Promise<void> {
    while (this.#recoveries.size > 0) await Promise.all(this.#recoveries);
  }

  recovering(bridge: string): boolean {
    return this.#feeds.get(bridge)?.live === false;
  }

  figures(): ReturnType<Pipelines['figures']> {
    const blocksInFlight = this.#threads.reduce((sum, { blocks }) => sum + blocks, 0);
    return {
      workers: this.#threads.length,
      blocksInFlight,
      snapshots: this.#snapshots.written,
      failures: this.#failures,
    };
  }

  heapBytes(): Promise<number> {
    return heapBytesOf(this.#threads);
  }

  stop(): Promise<void> {
    this.#stopping ??= this.#stop();
    return this.#stopping;
  }

  async crash(bridge: string): Promise<void> {
    await this.#feeds.get(bridge)?.thread.worker.terminate();
  }

  async #stop(): Promise<void> {
    clearInterval(this.#idle);
    this.#stopped.resolve(undefined);
    // A bridge that was still catching up keeps the snapshot it had, or took on the way.
    await Promise.all(this.#recoveries);
    const last = [...this.#feeds.values()].filter(({ live }) => live);
    for (const feed of last) this.#snapshots.take(feed, true);
    const done = (async () => {
      await Promise.all(last.map((feed) => this.#snapshots.taken(feed)));
      await Promise.allSettled([this.#snapshots.allWritten(), ...last.map(({ durable }) => durable)]);
    })();
    // A history that cannot write, or a pipeline that does not end, must not keep the server: the journal has it all.
    await Promise.race([done, sleep(STOP_MS, undefined, { ref: false })]);
    for (const thread of this.#threads) {
      thread.worker.removeAllListeners();
      release(thread);
    }
    await Promise.all(this.#threads.map(({ worker }) => worker.terminate()));
  }

  #isStopping(): boolean {
    return this.#stopping !== null;
  }

  // threads

  #thread(): Thread {
    const thread = newThread(newWorker());
    this.#listen(thread);
    return thread;
  }

  #listen(thread: Thread): void {
    const { worker } = thread;
    let reason = 'it ended by itself';
    worker.on('message', (message: FromWorker) => this.#hear(thread, message));
    worker.on('error', (failure: unknown) => (reason = failure instanceof Error ? failure.message : String(failure)));
    worker.on('exit', () => void this.#threadEnded(thread, reason));
  }

  async #threadEnded(thread: Thread, reason: string): Promise<void> {
    thread.failures += 1;
    this.#failures += 1;
    const own = [...this.#feeds.values()].filter((feed) => feed.thread === thread);
    const bridges = own.map(({ bridge }) => bridge).join(', ');
    this.#options.report({ code: 'WORKER_FAILED', where: bridges.slice(0, 200), detail: reason });
    for (const feed of own) this.#pause(feed);
    thread.blocks = thread.bytes = 0;
    release(thread);
    const recovery = (async () => {
      await sleep(Math.min(PAUSE_MS.longest, PAUSE_MS.first * 2 ** (thread.failures - 1)), undefined, { ref: false });
      if (this.#stopping !== null) return;
      thread.worker = newWorker();
      this.#listen(thread);
      await this.#recover(own);
    })();
    this.#track(recovery);
    await recovery;
  }

  #post(thread: Thread, message: ToWorker, transfer: ArrayBuffer[] = []): void {
    thread.worker.postMessage(message, transfer);
  }

  // blocks

  #dispatch(feed: Feed, block: SampleBlock, position: Position, receivedMicros: Micros | null): void {
    if (feed.poison.some((other) => comparePositions(other, position) === 0)) return;
    this.#options.given(block, receivedMicros);
    const bytes = block.channels.reduce((sum, { samples }) => sum + samples.byteLength, 0);
    const length = Math.max(0, ...block.channels.map(({ samples }) => samples.length));
    feed.newestMicros = Math.max(feed.newestMicros, sampleMicros(block.startMicros, length, block.rateHz));
    feed.through = position;
    feed.inFlight.push({ position, bytes, postedMs: sharedMs() });
    if (receivedMicros !== null) feed.replaysInFlight += 1;
    feed.thread.blocks += 1;
    feed.thread.bytes += bytes;
    const buffers = new Set(block.channels.map(({ samples }) => samples.buffer as ArrayBuffer));
    this.#post(feed.thread, { kind: 'block', block }, [...buffers]);
    this.#snapshots.takeWhenDue(feed);
  }

  #room(thread: Thread): Promise<void> | null {
    if (thread.blocks <= this.#limits.blocks && thread.bytes <= this.#limits.bytes) return null;
    return new Promise((resolve) => thread.waiting.push(resolve));
  }

  /** A stop does not wait for a disk that refuses. */
  #lastingRoom(): Promise<void> | null {
    const room = this.#options.room?.() ?? null;
    return room === null || this.#isStopping() ? null : Promise.race([room, this.#stopped.promise]);
  }

  #hear(thread: Thread, message: FromWorker): void {
    const feed = message.kind === 'outputs' ? undefined : this.#feeds.get(message.bridge);
    if (message.kind === 'outputs') {
      for (const one of message.outputs) {
        const own = this.#feeds.get(one.bridge);
        if (own !== undefined) this.#came(own, one);
      }
      if (thread.blocks <= this.#limits.blocks / 2 && thread.bytes <= this.#limits.bytes / 2) release(thread);
    } else if (feed !== undefined && message.kind === 'fault') this.#fault(feed, message.detail);
    else if (feed !== undefined && message.kind === 'snapshot') this.#snapshots.came(feed, message);
  }

  #came(feed: Feed, came: BridgeOutput): void {
    const { blocks, quiet, output } = came;
    const replayed = feed.replaysInFlight > 0;
    if (!replayed) this.#time(feed, came);
    for (const { position, bytes } of feed.inFlight.splice(0, blocks)) {
      feed.thread.blocks -= 1;
      feed.thread.bytes -= bytes;
      if (quiet) feed.quietPosition = position;
    }
    feed.replaysInFlight = Math.max(0, feed.replaysInFlight - blocks);
    feed.thread.failures = 0;
    const lasting = this.#options.take(feed.bridge, output, replayed);
    if (lasting === null) return;
    feed.durable = Promise.all([feed.durable, lasting]).then(() => undefined);
    // Told by whoever wrote; here it only keeps the snapshot from being taken.
    feed.durable.catch(() => undefined);
  }

  #time(feed: Feed, { begunMs, doneMs }: BridgeOutput): void {
    const { stages } = this.#options;
    const first = feed.inFlight[0];
    if (stages === undefined || first === undefined) return;
    const nowMs = sharedMs();
    stages.note('queue', begunMs - first.postedMs);
    stages.note('step', doneMs - begunMs);
    stages.note('return', nowMs - doneMs);
  }

  // failures and recovery

  /** The block in hand made the pipeline throw. The second time it is left out. */
  #fault(feed: Feed, detail: string): void {
    this.#failures += 1;
    const position = feed.inFlight[0]?.position ?? null;
    this.#options.report({ code: 'WORKER_FAILED', where: feed.bridge, detail: detail.slice(0, 400) });
    const again = position !== null && feed.failedAt !== null && comparePositions(position, feed.failedAt) === 0;
    if (again) feed.poison = [...feed.poison, position].slice(-LIMIT_POISON);
    feed.failedAt = position;
    this.#pause(feed);
    this.#track(
      (async () => {
        if (position === null) {
          // It did not even open: its snapshot is no good, or the trouble lies deeper.
          await removeSnapshot(this.#options.folder, feed.bridge);
          await sleep(PAUSE_MS.first, undefined, { ref: false });
        }
        if (!this.#isStopping()) await this.#recover([feed]);
      })(),
    );
  }

  /** Live blocks are left to the journal from here on. */
  #pause(feed: Feed): void {
    if (feed.live) feed.skippedTo = feed.through;
    feed.live = false;
    feed.generation += 1;
    for (const { bytes } of feed.inFlight) {
      feed.thread.blocks -= 1;
      feed.thread.bytes -= bytes;
    }
    feed.inFlight = [];
    feed.replaysInFlight = 0;
    this.#snapshots.giveUp(feed);
  }

  #track(recovery: Promise<void>): void {
    const tracked = recovery
      .catch((failure: unknown) => {
        this.#options.report({ code: 'SERVER_FAULT', where: 'recovery', detail: String(failure) });
      })
      .finally(() => this.#recoveries.delete(tracked));
    this.#recoveries.add(tracked);
  }

  /** Opens the pipelines from their snapshots and feeds them from the journal until they are abreast of it. */
  async #recover(feeds: readonly Feed[]): Promise<void> {
    const generations = new Map(feeds.map((feed) => [feed.bridge, feed.generation]));
    // A bridge whose pipeline failed meanwhile has a recovery of its own.
    const isMine = (feed: Feed): boolean => feed.generation === generations.get(feed.bridge);
    for (const feed of feeds) await this.#openFrom(feed);
    let at = oldest(feeds.map(({ openedAt }) => openedAt));
    for (;;) {
      at = await this.#replay(isMine, at);
      const mine = feeds.filter(isMine);
      if (this.#isStopping() || mine.length === 0) return;
      const reached = at;
      if (mine.every(({ skippedTo }) => skippedTo === null || !isAfter(skippedTo, reached))) break;
      // What was left out is on its way to the disk.
      while (!isAfter(this.#options.journal.newest(), reached) && !this.#isStopping()) await sleep(5);
    }
    for (const feed of feeds.filter(isMine)) {
      feed.live = true;
      feed.skippedTo = null;
    }
  }

  async #replay(isMine: (feed: Feed) => boolean, after: Position | null): Promise<Position | null> {
    let at = after;
    let records = 0;
    for await (const { position, record } of this.#options.journal.readFrom(after)) {
      for (const block of this.#options.decode(record)) {
        const feed = this.#feeds.get(block.bridge);
        if (feed === undefined || !isMine(feed) || !isAfter(position, feed.openedAt)) continue;
        this.#dispatch(feed, block, position, record.receivedMicros);
        await this.#room(feed.thread);
        await this.#lastingRoom();
      }
      at = position;
      if (this.#isStopping()) break;
      if (++records % RECORDS_A_TURN === 0) await turn();
    }
    return at;
  }

  async #openFrom(feed: Feed): Promise<void> {
    const { generation } = feed;
    const { folder, report, recall } = this.#options;
    const reading = await readSnapshot(folder, feed.bridge);
    if (feed.generation !== generation) return;
    let state: Uint8Array | null = null;
    feed.through = feed.openedAt = null;
    const snapshot = reading.ok ? reading.value : null;
    if (!reading.ok) report(reading.complaint);
    if (snapshot !== null) {
      const mismatch = mismatchOf(snapshot, feed);
      if (mismatch === null) state = snapshot.state;
      else report({ code: 'SNAPSHOT_UNUSABLE', where: feed.bridge, detail: mismatch });
      // Of another version: passages that are finished stay as they are, and the new pipeline begins where none was open.
      feed.openedAt = feed.through = mismatch === null ? snapshot.position : snapshot.quietPosition;
      feed.quietPosition = snapshot.quietPosition;
    }
    // Conditions belong to the pipeline that will say when they end; a new one says anew which hold.
    const sensors = (snapshot?.sensors ?? []).map((sensor) => (state === null ? { ...sensor, active: [] } : sensor));
    recall(feed.bridge, { loggers: snapshot?.loggers ?? {}, sensors });
    const { bridge, definition, version } = feed;
    this.#post(feed.thread, { kind: 'open', bridge, definition, version, state });
  }
}
