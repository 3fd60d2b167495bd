import { mkdtemp, readdir, readFile, rm, writeFile } from 'node:fs/promises';
import { availableParallelism, tmpdir } from 'node:os';
import { join } from 'node:path';
import { setTimeout as sleep } from 'node:timers/promises';
import { afterEach, beforeAll, beforeEach, describe, expect, test } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Complaint } from '#core/contract/errors.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { LevelEvent, PipelineOutput } from '#core/contract/pipeline.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import type { Position } from '../../server/ingest/journal.ts';
import type { JournalRecord } from '../../server/ingest/journal-record.ts';
import { startPipelines, type Pipelines, type PipelinesOptions } from '../../server/pipelines.ts';
import { readSnapshot, writeSnapshot } from '../../server/snapshot.ts';
import type { Stage } from '../../server/stages.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { simulate } from '../../simulator/scene.ts';
import { createTrain } from '../../simulator/train.ts';
import { plainBridge } from '../support/bridges.ts';
import { blocksOf, runPipeline } from '../support/scenes.ts';
import { DAWN } from '../support/specimen.ts';

/** Three trains in two and a half minutes, as half-second blocks. */
const definition: BridgeDefinition = plainBridge();
let blocks: SampleBlock[];
let undisturbed: { passages: Passage[]; levels: LevelEvent[] };

beforeAll(() => {
  const train = (afterS: number, type: 'intercity' | 'regional multiple unit', speedMs: number) => ({
    kind: 'passage' as const,
    train: createTrain(type, 3),
    onMicros: DAWN + afterS * MICROS_PER_SECOND,
    speedMs,
    direction: 'rising' as const,
  });
  const { channels } = simulate({
    definition,
    parameters: bridgeParameters(definition),
    seed: 5,
    fromMicros: DAWN,
    toMicros: DAWN + 150 * MICROS_PER_SECOND,
    events: [train(25, 'intercity', 44), train(65, 'regional multiple unit', 39), train(105, 'intercity', 42)],
  });
  blocks = [...blocksOf(definition.id, channels)];
  const output = runPipeline(definition, blocks.map(copy));
  // `finish` measures what is still open; a server never finishes.
  undisturbed = { passages: output.passages.map(({ passage }) => passage), levels: output.levels };
});

const copy = (block: SampleBlock): SampleBlock => structuredClone(block);
const at = (index: number): Position => ({ segment: 1, offset: index });

/** A journal in memory whose records are numbers of blocks; `upTo` are durable. */
class Ledger {
  upTo = 0;
  reads = 0;
  newest = (): Position | null => (this.upTo === 0 ? null : at(this.upTo - 1));
  async *readFrom(after: Position | null): AsyncGenerator<{ position: Position; record: JournalRecord }> {
    for (let index = after === null ? 0 : after.offset + 1; index < this.upTo; index++) {
      this.reads += 1;
      await Promise.resolve();
      yield {
        position: at(index),
        record: { receivedMicros: DAWN + index, topic: String(index), payload: new Uint8Array() },
      };
    }
  }
}

let folder: string;
let ledger: Ledger;
let complaints: Complaint[];
let outputs: { output: PipelineOutput; replayed: boolean }[];
let given: (number | null)[];
let pipelines: Pipelines;

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'pipelines-'));
  ledger = new Ledger();
  [complaints, outputs, given] = [[], [], []];
});
afterEach(async () => {
  await pipelines.stop();
  await rm(folder, { recursive: true });
});

function start(over: Partial<PipelinesOptions> = {}): Pipelines {
  pipelines = startPipelines({ ...pipelinesOptions(), workers: 1, ...over });
  return pipelines;
}

function pipelinesOptions(): PipelinesOptions {
  return {
    bridges: [{ definition, version: 1 }],
    folder,
    journal: ledger,
    decode: ({ topic }) => [copy(blocks[Number(topic)]!)],
    given: (_, receivedMicros) => given.push(receivedMicros),
    take: (_, output, replayed) => {
      outputs.push({ output, replayed });
      return null;
    },
    remember: () => ({ loggers: { L1: DAWN }, sensors: [] }),
    recall: () => undefined,
    report: (complaint) => complaints.push(complaint),
    limits: { snapshotEventS: 10, snapshotWallMs: 0 },
  };
}

/** Blocks from the ledger's end up to one number, as ingest would bring them. */
async function bring(to: number): Promise<void> {
  for (; ledger.upTo < to;) {
    const index = ledger.upTo;
    ledger.upTo += 1;
    pipelines.feed(copy(blocks[index]!), at(index));
    await pipelines.room();
    if (index % 16 === 0) await sleep(1);
  }
}

async function settled(): Promise<void> {
  do {
    await pipelines.ready();
    await sleep(2);
  } while (pipelines.figures().blocksInFlight > 0 || pipelines.recovering(definition.id));
}

/** What the history and the desk keep: of each passage and level event one, by id; the same twice must be the same. */
function kept(): { passages: Passage[]; levels: LevelEvent[] } {
  const passages = new Map<string, Passage>();
  const levels = new Map<string, LevelEvent>();
  for (const { output } of outputs) {
    for (const { passage } of output.passages) {
      if (passages.has(passage.id)) expect(passage).toEqual(passages.get(passage.id));
      passages.set(passage.id, passage);
    }
    for (const level of output.levels)
      levels.set(`${level.sensor} ${level.limit} ${level.kind} ${level.micros}`, level);
  }
  return { passages: [...passages.values()], levels: [...levels.values()] };
}

const snapshotPosition = async (): Promise<number> => {
  const reading = await readSnapshot(folder, definition.id);
  return reading.ok ? (reading.value?.position?.offset ?? -1) : -1;
};

describe('pipelines in worker threads', () => {
  test('give what the pipeline itself gives, bit for bit', async () => {
    expect(undisturbed.passages.length).toBe(3);
    start();
    await pipelines.ready();
    await bring(blocks.length);
    await settled();
    expect(kept()).toEqual(undisturbed);
    expect(outputs.every(({ replayed }) => !replayed)).toBe(true);
    expect(complaints).toEqual([]);
  });

  test('go on after a stop in the middle of a passage, and read nothing of the journal twice', async () => {
    start();
    await bring(blocks.length / 5);
    await settled();
    await pipelines.stop();
    const [position, reads, before] = [await snapshotPosition(), ledger.reads, outputs.length];
    expect(position).toBe(ledger.upTo - 1);
    start();
    await bring(blocks.length);
    await settled();
    expect(kept()).toEqual(undisturbed);
    // Only what came while the snapshot was loaded.
    expect(ledger.reads - reads).toBeLessThan(blocks.length - position);
    expect(outputs.slice(before).filter(({ replayed }) => replayed).length).toBeLessThanOrEqual(ledger.reads - reads);
  });

  test('are built again from snapshot and journal when a thread crashes, while more comes in', async () => {
    start();
    await bring(50);
    await settled();
    const crashes = [60, 130, 200];
    for (const crash of crashes) {
      await bring(crash);
      await pipelines.ready();
      await pipelines.crash(definition.id);
      await bring(crash + 20);
    }
    await bring(blocks.length);
    await settled();
    expect(kept()).toEqual(undisturbed);
    expect(complaints.map(({ code }) => code)).toEqual(crashes.map(() => 'WORKER_FAILED'));
    expect(given.some((received) => received !== null)).toBe(true);
  });

  test('survive a thread that crashes again while it is being rebuilt', async () => {
    start();
    await bring(200);
    await pipelines.ready();
    for (let crash = 0; crash < 3; crash++) {
      await pipelines.crash(definition.id);
      // The new thread is fed from the journal now.
      const before = given.length;
      while (given.length < before + 5) await sleep(1);
    }
    await bring(blocks.length);
    await settled();
    expect(kept()).toEqual(undisturbed);
    expect(complaints.map(({ code }) => code)).toEqual(['WORKER_FAILED', 'WORKER_FAILED', 'WORKER_FAILED']);
  });

  test('replay the whole journal where the snapshot is damaged', async () => {
    start();
    await bring(120);
    await settled();
    await pipelines.stop();
    const [name] = await readdir(folder);
    const bytes = await readFile(join(folder, name!));
    bytes[Math.floor(bytes.length / 2)]! ^= 0x40;
    await writeFile(join(folder, name!), bytes);
    outputs = [];
    start();
    await bring(blocks.length);
    await settled();
    expect(kept()).toEqual(undisturbed);
    expect(complaints.map(({ code }) => code)).toEqual(['SNAPSHOT_UNUSABLE']);
  });

  test('of another definition begin where no passage was open, and leave finished passages alone', async () => {
    const flat = { code: 'flat' as const, sinceMicros: DAWN, detail: 'seen' };
    const none = { newestMicros: DAWN, samples: 1, counts: {}, noise: null, offset: null };
    const remember = () => ({ loggers: {}, sensors: [{ ...none, sensor: 'A1', active: [flat] }] });
    const recalled: number[] = [];
    const recall: PipelinesOptions['recall'] = (_, { sensors }) => recalled.push(sensors[0]?.active.length ?? -1);
    start({ remember, recall });
    await bring(100);
    await settled();
    await pipelines.stop();
    await start({ remember, recall }).ready();
    await pipelines.stop();
    const before = kept().passages.map(({ id }) => id);
    expect(before.length).toBe(1);
    outputs = [];
    start({ bridges: [{ definition, version: 2 }], remember, recall });
    await bring(blocks.length);
    await settled();
    // The new pipeline says anew which conditions hold.
    expect(recalled).toEqual([-1, 1, 0]);
    expect(complaints.map(({ code }) => code)).toEqual(['SNAPSHOT_UNUSABLE']);
    const after = kept().passages;
    expect(after.length).toBe(2);
    expect(after.every(({ id, provenance }) => !before.includes(id) && provenance.definitionVersion === 2)).toBe(true);
  });

  test('leave out a block that makes them fail twice, and nothing else', async () => {
    const poison = 90;
    const bad = (index: number): SampleBlock => {
      const block = copy(blocks[index]!);
      if (index !== poison) return block;
      // Big integers cannot be calibrated: a stand-in for a mistake of ours.
      return { ...block, channels: block.channels.map((one) => ({ ...one, samples: new BigInt64Array(8) as never })) };
    };
    start({ decode: ({ topic }) => [bad(Number(topic))] });
    await pipelines.ready();
    await bring(poison);
    ledger.upTo = poison + 1;
    pipelines.feed(bad(poison), at(poison));
    await bring(blocks.length);
    await settled();
    expect(complaints.map(({ code }) => code)).toEqual(['WORKER_FAILED', 'WORKER_FAILED']);
    const expected = runPipeline(definition, blocks.filter((_, index) => index !== poison).map(copy));
    expect(kept().passages).toEqual(expected.passages.map(({ passage }) => passage));
  });

  test('hold no more blocks than their limit while whoever feeds waits for room', async () => {
    start({ limits: { blocks: 8 } });
    await pipelines.ready();
    let most = 0;
    for (const [index, block] of blocks.entries()) {
      ledger.upTo = index + 1;
      pipelines.feed(copy(block), at(index));
      most = Math.max(most, pipelines.figures().blocksInFlight);
      await pipelines.room();
    }
    expect(most).toBeLessThanOrEqual(9);
    await settled();
    expect(kept()).toEqual(undisturbed);
  });

  test('write no snapshot before all that came out is durable', async () => {
    let finish = (): void => undefined;
    const disk = new Promise<void>((resolve) => (finish = resolve));
    start({ take: () => disk });
    await pipelines.ready();
    await bring(150);
    await settled();
    await sleep(100);
    expect(await readdir(folder)).toEqual([]);
    finish();
    await pipelines.stop();
    expect(await snapshotPosition()).toBe(149);
  });

  test('that cannot be built say so and let the others work', async () => {
    const broken = { ...plainBridge({ id: 'broken' }), sensors: null as never };
    start({
      bridges: [
        { definition: broken, version: 1 },
        { definition, version: 1 },
      ],
    });
    await bring(60);
    while (!complaints.some(({ code }) => code === 'WORKER_FAILED')) await sleep(5);
    await bring(blocks.length);
    while (kept().passages.length < undisturbed.passages.length) await sleep(5);
    expect(new Set(complaints.map(({ code, where }) => `${code} ${where}`))).toEqual(new Set(['WORKER_FAILED broken']));
  });
});

test('whoever feeds waits while the history has no room, but a stop does not', async () => {
  let room: PromiseWithResolvers<undefined> | null = Promise.withResolvers();
  start({ room: () => room?.promise ?? null });
  await pipelines.ready();
  let fed = false;
  const waiting = pipelines.room().then(() => (fed = true));
  await sleep(10);
  expect(fed).toBe(false);
  room.resolve(undefined);
  await waiting;
  room = null;
  await pipelines.room();
  room = Promise.withResolvers();
  const refused = pipelines.room();
  await pipelines.stop();
  await refused;
});

test('few bridges get a thread each, many share four or as many as there are cores, and all of them measure', async () => {
  const bridges = Array.from({ length: 3 }, (_, i) => ({ definition: { ...definition, id: `b${i}` }, version: 1 }));
  const came = new Set<string>();
  const noted = new Map<Stage, number[]>();
  const options = { ...pipelinesOptions(), bridges };
  pipelines = startPipelines({
    ...options,
    take: (bridge) => {
      came.add(bridge);
      return null;
    },
    stages: { note: (stage, ms) => noted.set(stage, [...(noted.get(stage) ?? []), ms]) },
  });
  await pipelines.ready();
  expect(pipelines.figures().workers).toBe(3);
  for (const [index, { definition: one }] of bridges.entries()) {
    pipelines.feed({ ...copy(blocks[0]!), bridge: one.id }, at(index));
  }
  while (came.size < 3) await sleep(2);
  expect(await pipelines.heapBytes()).toBeGreaterThan(0);
  // Each block was timed on each stretch of its way through a thread; clocks of threads differ by microseconds.
  for (const stage of ['queue', 'step', 'return'] as const) {
    expect(noted.get(stage)).toHaveLength(3);
    expect(Math.min(...noted.get(stage)!)).toBeGreaterThan(-1);
  }
  await pipelines.stop();
  pipelines = startPipelines({
    ...options,
    bridges: Array.from({ length: 70 }, (_, i) => ({ definition: { ...definition, id: `c${i}` }, version: 1 })),
  });
  expect(pipelines.figures().workers).toBe(Math.min(70, Math.max(4, availableParallelism())));
});

test('a snapshot comes back as it was written, and one that is no snapshot is a complaint', async () => {
  pipelines = start();
  await pipelines.stop();
  const snapshot = {
    bridge: 'b',
    pipelineVersion: '1',
    definitionVersion: 2,
    position: at(7),
    quietPosition: null,
    loggers: { L1: DAWN },
    sensors: [],
    state: Uint8Array.of(1, 2, 3),
  };
  await writeSnapshot(folder, snapshot);
  const reading = await readSnapshot(folder, 'b');
  expect(reading).toMatchObject({ ok: true, value: { ...snapshot, state: expect.anything() as unknown } });
  for (const bytes of [
    Buffer.alloc(0),
    Buffer.from('SPANSNP1'),
    Buffer.from('SPANSNP1\0\0\0\0garbage'),
    Buffer.alloc(99),
  ]) {
    await writeFile(join(folder, 'b.snapshot'), bytes);
    expect(await readSnapshot(folder, 'b')).toMatchObject({ ok: false, complaint: { code: 'SNAPSHOT_UNUSABLE' } });
  }
  expect(await readSnapshot(folder, 'never')).toEqual({ ok: true, value: null });
});
