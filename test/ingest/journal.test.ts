import { spawn } from 'node:child_process';
import { once } from 'node:events';
import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { describe, expect, it } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { comparePositions, LIMIT_QUEUED_BYTES, openJournal, type Journal } from '../../server/ingest/journal.ts';
import { SEGMENT_HEADER_BYTES, type JournalRecord } from '../../server/ingest/journal-record.ts';
import { createRandom, type Random } from '../support/random.ts';
import { Disk } from './disk.ts';
import { payloadOf } from './written.ts';

const HOUR = 3_600_000_000;
const START = 1_780_000_000_000_000;

/** A journal on a disk in memory, and what it complained of. */
async function journalOn(disk: Disk, change: { maxBytes?: number; maxHours?: number; clock?: () => number } = {}) {
  const complaints: Complaint[] = [];
  let now = START;
  const journal = await openJournal('/j', {
    maxBytes: 1e9,
    maxHours: 1000,
    clock: () => (now += 1000),
    ...change,
    report: (complaint) => void complaints.push(complaint),
    files: disk,
  });
  return { journal, complaints, codes: () => complaints.map(({ code }) => code) };
}

function recordOf(number: number, bytes = 40): JournalRecord {
  const payload = Buffer.alloc(bytes, number % 251);
  payload.writeUInt32LE(number, 0);
  return { receivedMicros: START + number, topic: `spanbeat/brücke/L${number % 3}/samples`, payload };
}

const numberOf = ({ payload }: JournalRecord): number =>
  Buffer.from(payload.buffer, payload.byteOffset, payload.byteLength).readUInt32LE(0);

async function numbersIn(journal: Journal): Promise<number[]> {
  const numbers: number[] = [];
  for await (const { record } of journal.readFrom(null)) numbers.push(numberOf(record));
  return numbers;
}

/** The error's code, or `durable`. */
const outcome = (durable: Promise<void>): Promise<string> =>
  durable.then(
    () => 'durable',
    (error: unknown) => (error instanceof SpanbeatError ? error.code : String(error)),
  );

const pathOf = (disk: Disk): string => [...disk.nodes.keys()].at(-1)!;

const count = (length: number): number[] => Array.from({ length }, (_, i) => i);

describe('the journal', () => {
  it('gives back what was appended, in order, bit for bit, from any position on, over restarts', async () => {
    const disk = new Disk();
    const first = await journalOn(disk);
    const appended = count(20).map((i) => first.journal.append(recordOf(i, 10 + i)));
    await Promise.all(appended.map(({ durable }) => durable));
    await first.journal.close();
    const { journal } = await journalOn(disk, { clock: () => START + HOUR });
    await journal.append(recordOf(20)).durable;
    const read = [];
    for await (const each of journal.readFrom(null)) read.push(each);
    expect(read.map(({ record }) => ({ ...record, payload: Buffer.from(record.payload) }))).toEqual(
      [...count(20).map((i) => recordOf(i, 10 + i)), recordOf(20)].map((record) => ({ ...record })),
    );
    for (let i = 1; i < read.length; i++)
      expect(comparePositions(read[i - 1]!.position, read[i]!.position)).toBeLessThan(0);
    const later: number[] = [];
    for await (const { record } of journal.readFrom(appended[17]!.position)) later.push(numberOf(record));
    expect(later).toEqual([18, 19, 20]);
  });

  it('is durable no sooner than the sync, and syncs once for all that came together', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk);
    await journal.append(recordOf(0)).durable;
    const { syncs } = disk;
    const { promise: held, resolve: letGo } = Promise.withResolvers<undefined>();
    disk.beforeSync = () => held;
    let acknowledged = 0;
    const all = count(50).map((i) => journal.append(recordOf(1 + i)).durable.then(() => (acknowledged += 1)));
    for (let i = 0; i < 20; i++) await new Promise((resolve) => setImmediate(resolve));
    expect(acknowledged).toBe(0);
    letGo(undefined);
    await Promise.all(all);
    expect(acknowledged).toBe(50);
    expect(disk.syncs - syncs).toBe(1);
  });

  it('acknowledges nothing when the sync fails, does not trust that file again, and goes on', async () => {
    const disk = new Disk();
    const { journal, codes } = await journalOn(disk);
    await journal.append(recordOf(0)).durable;
    // write, then sync
    disk.fault = { step: disk.steps + 2, code: 'EIO' };
    expect(await outcome(journal.append(recordOf(1)).durable)).toBe('JOURNAL_WRITE');
    expect(journal.status().full).toBe(true);
    expect(await outcome(journal.append(recordOf(2)).durable)).toBe('durable');
    expect(journal.status().full).toBe(false);
    expect(disk.nodes.size).toBe(2);
    expect(codes()).toEqual(['JOURNAL_WRITE']);
    expect(await numbersIn(journal)).toEqual([0, 2]);
  });

  it('says once that the disk is full, refuses while it is, and goes on when there is room', async () => {
    const disk = new Disk();
    const { journal, codes } = await journalOn(disk);
    await journal.append(recordOf(0)).durable;
    disk.fault = { step: disk.steps + 1, code: 'ENOSPC', forever: true };
    for (const i of [1, 2, 3]) expect(await outcome(journal.append(recordOf(i)).durable)).toBe('DISK_FULL');
    expect(codes()).toEqual(['DISK_FULL']);
    disk.fault = null;
    expect(await outcome(journal.append(recordOf(4)).durable)).toBe('durable');
    expect(await numbersIn(journal)).toEqual([0, 4]);
  });

  it('loses no acknowledged record, tears none, and takes more at once, whichever step on the disk fails', async () => {
    const steps = await tried(null);
    expect(steps.failed).toBe(0);
    for (let step = 1; step <= steps.steps; step++) {
      const { acknowledged, read, failed } = await tried({ step, code: step % 2 === 0 ? 'EIO' : 'ENOSPC' });
      // One step can take with it only what waited at that moment.
      expect(failed, `step ${step}`).toBeLessThanOrEqual(3);
      expect(acknowledged.length + failed, `step ${step}`).toBe(30);
      expect(
        read.filter((number) => acknowledged.includes(number)),
        `step ${step}`,
      ).toEqual(acknowledged);
      expect(new Set(read).size, `step ${step}`).toBe(read.length);
    }
  });

  it('loses no acknowledged record and tears none when the power is cut at any step', async () => {
    for (let seed = 0; seed < 150; seed++) {
      const random = createRandom(seed);
      const { acknowledged, read } = await cutOff(random);
      expect(
        read.filter((number) => acknowledged.includes(number)),
        `seed ${seed}`,
      ).toEqual(acknowledged);
      expect(new Set(read).size, `seed ${seed}`).toBe(read.length);
    }
  });

  it('cuts off a record that a crash left unfinished, wherever the file was cut, and keeps all before it', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk);
    const begins: number[] = [];
    for (const i of count(4)) {
      const { position, durable } = journal.append(recordOf(i, 20 + i));
      await durable;
      begins.push(position!.offset);
    }
    const path = pathOf(disk);
    const full = Buffer.from(disk.nodes.get(path)!.bytes);
    const borders = [...begins, full.length];
    for (let end = 0; end <= full.length; end++) {
      const cut = new Disk();
      cut.put(path, Buffer.from(full.subarray(0, end)));
      const { journal: again, complaints } = await journalOn(cut, { clock: () => START + HOUR });
      const whole = borders.filter((border) => border <= end && border > SEGMENT_HEADER_BYTES).length;
      const torn = end > SEGMENT_HEADER_BYTES && !borders.includes(end);
      expect(complaints.map(({ code }) => code)).toEqual(torn ? ['JOURNAL_TAIL'] : []);
      if (torn)
        expect(complaints[0]!.detail).toMatch(
          new RegExp(`^${end - borders[whole]!} bytes? after byte ${borders[whole]} `),
        );
      await again.append(recordOf(9)).durable;
      expect(await numbersIn(again), `cut at ${end}`).toEqual([...count(whole), 9]);
    }
  });

  it('reads on after a damaged byte, says so, and keeps a copy aside', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk);
    const places = count(5).map((i) => journal.append(recordOf(i)));
    await Promise.all(places.map(({ durable }) => durable));
    await journal.close();
    const path = pathOf(disk);
    const from = places[2]!.position!.offset;
    const to = places[3]!.position!.offset;
    for (let at = from; at < to; at++) {
      const bytes = Buffer.from(disk.nodes.get(path)!.bytes);
      bytes[at] = bytes[at]! ^ 0x41;
      const damaged = new Disk();
      damaged.put(path, bytes);
      const { journal: again, complaints } = await journalOn(damaged, { clock: () => START + HOUR });
      expect(await numbersIn(again)).toEqual([0, 1, 3, 4]);
      expect(complaints).toHaveLength(1);
      expect(complaints[0]).toMatchObject({ code: 'JOURNAL_CORRUPT' });
      expect(complaints[0]!.detail).toContain(`bytes ${from} to ${to}`);
      expect([...damaged.nodes.keys()].some((name) => name.includes('/damaged/'))).toBe(true);
    }
  });

  it('finds the records of a segment whose header is damaged', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk);
    await journal.append(recordOf(0)).durable;
    await journal.close();
    disk.nodes.get(pathOf(disk))!.bytes.fill(0, 0, SEGMENT_HEADER_BYTES);
    const { journal: again } = await journalOn(disk, { clock: () => START + HOUR });
    expect(await numbersIn(again)).toEqual([0]);
  });

  it('keeps young segments whose headers are damaged as long as others', async () => {
    const disk = new Disk();
    for (const i of count(4)) {
      const { journal } = await journalOn(disk, { clock: () => START + i * HOUR });
      await journal.append(recordOf(i)).durable;
      await journal.close();
    }
    for (const path of [...disk.nodes.keys()].slice(0, 3)) disk.nodes.get(path)!.bytes.fill(0, 0, SEGMENT_HEADER_BYTES);
    const { journal, codes } = await journalOn(disk, { maxHours: 24, clock: () => START + 5 * HOUR });
    expect(journal.status().oldestMicros).toBe(START);
    await journal.append(recordOf(4)).durable;
    expect(await numbersIn(journal)).toEqual([0, 1, 2, 3, 4]);
    expect(codes()).toEqual([]);
  });

  it('leaves out a segment that the disk no longer gives, says so, and reads and takes all others', async () => {
    for (const lost of count(3)) {
      const disk = new Disk();
      for (const i of count(3)) {
        const { journal } = await journalOn(disk, { clock: () => START + i * HOUR });
        await journal.append(recordOf(i)).durable;
        await journal.close();
      }
      disk.unreadable.add([...disk.nodes.keys()][lost]!);
      const { journal, codes } = await journalOn(disk, { clock: () => START + 5 * HOUR });
      await journal.append(recordOf(3)).durable;
      expect(await numbersIn(journal)).toEqual([0, 1, 2, 3].filter((i) => i !== lost));
      expect(new Set(codes())).toEqual(new Set(['JOURNAL_CORRUPT']));
    }
  });

  it('says with a code that its folder cannot be used', async () => {
    const disk = new Disk();
    disk.fault = { step: 1, code: 'EACCES' };
    await expect(journalOn(disk)).rejects.toMatchObject({ code: 'JOURNAL_WRITE', where: '/j' });
    disk.fault = { step: disk.steps + 1, code: 'ENOSPC' };
    await expect(journalOn(disk)).rejects.toMatchObject({ code: 'DISK_FULL', where: '/j' });
  });

  it('never deletes the segment it writes, however small its limits', async () => {
    const disk = new Disk();
    let now = START;
    const { journal, codes } = await journalOn(disk, { maxBytes: 1, maxHours: 1e-9, clock: () => (now += 1_000_000) });
    for (const i of count(5)) {
      const own = [0, 1, 2].map((k) => journal.append(recordOf(3 * i + k, 200_000)).durable);
      await Promise.all(own);
      expect((await numbersIn(journal)).at(-1)).toBe(3 * i + 2);
    }
    expect(new Set(codes())).toEqual(new Set(['JOURNAL_TRIMMED']));
  });

  it('goes on trimming and writing where an old segment cannot be removed', async () => {
    const disk = new Disk();
    const { journal, codes } = await journalOn(disk, { maxBytes: 1024 * 1024 });
    disk.keepsFiles = true;
    for (const i of count(40)) expect(await outcome(journal.append(recordOf(i, 50_000)).durable)).toBe('durable');
    expect(new Set(codes())).toEqual(new Set(['JOURNAL_WRITE']));
    disk.keepsFiles = false;
    // What stayed behind is found at the next start, and goes then.
    await journal.close();
    const { journal: again } = await journalOn(disk, { maxBytes: 1024 * 1024, clock: () => START + HOUR });
    await again.append(recordOf(40)).durable;
    await again.close();
    expect(again.status().bytes).toBeLessThanOrEqual(1024 * 1024);
    expect([...disk.nodes.values()].reduce((sum, { bytes }) => sum + bytes.length, 0)).toBe(again.status().bytes);
  });

  it('gives a reader that goes on while segments are deleted under it what is left, in order', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk, { maxBytes: 1024 * 1024 });
    for (const i of count(20)) await journal.append(recordOf(i, 50_000)).durable;
    const read: number[] = [];
    for await (const { record } of journal.readFrom(null)) {
      read.push(numberOf(record));
      if (read.length === 1) for (const i of count(60)) await journal.append(recordOf(20 + i, 50_000)).durable;
    }
    expect(read).toEqual(read.toSorted((a, b) => a - b));
    expect(new Set(read).size).toBe(read.length);
    expect(read.at(-1)).toBe(79);
    const held = await numbersIn(journal);
    expect(held.filter((number) => !read.includes(number))).toEqual([]);
  });

  it('deletes its oldest segments beyond its bytes', async () => {
    const disk = new Disk();
    const { journal, codes } = await journalOn(disk, { maxBytes: 1024 * 1024 });
    for (const i of count(100)) await journal.append(recordOf(i, 50_000)).durable;
    expect(journal.status().bytes).toBeLessThanOrEqual(1024 * 1024);
    expect(new Set(codes())).toEqual(new Set(['JOURNAL_TRIMMED']));
    const kept = await numbersIn(journal);
    expect(kept.at(-1)).toBe(99);
    expect(kept).toEqual(count(kept.length).map((i) => 100 - kept.length + i));
    expect(kept.length).toBeGreaterThan(10);
  });

  it('deletes its oldest segments beyond its hours, keeping all that is younger', async () => {
    const disk = new Disk();
    let now = START;
    const { journal } = await journalOn(disk, { maxHours: 24, clock: () => now });
    for (const i of count(60)) {
      now = START + i * HOUR;
      await journal.append(recordOf(i)).durable;
    }
    const kept = await numbersIn(journal);
    expect(kept[0]).toBeLessThanOrEqual(60 - 24);
    expect(kept[0]).toBeGreaterThanOrEqual(60 - 24 - 3);
    expect(kept.at(-1)).toBe(59);
    expect(journal.status().oldestMicros).toBe(START + kept[0]! * HOUR);
  });

  it('refuses what is too large, what comes faster than the disk takes it, and what comes after its end', async () => {
    const disk = new Disk();
    const { journal } = await journalOn(disk);
    expect(await outcome(journal.append(recordOf(0, BLOCK_LIMITS.bytes + 1)).durable)).toBe('MESSAGE_TOO_LARGE');
    const large = recordOf(1, BLOCK_LIMITS.bytes);
    const fitting = Math.floor(LIMIT_QUEUED_BYTES / (BLOCK_LIMITS.bytes + 100));
    const outcomes = await Promise.all(count(fitting + 2).map(() => outcome(journal.append(large).durable)));
    expect(outcomes.filter((one) => one === 'durable').length).toBeGreaterThanOrEqual(fitting);
    expect(outcomes.at(-1)).toBe('MESSAGE_RATE_LIMIT');
    await journal.close();
    expect(await outcome(journal.append(recordOf(2)).durable)).toBe('JOURNAL_WRITE');
  });
});

describe('the journal of a process that is killed', () => {
  // The least a segment can have is 256 kB, so that kills fall into changes of segments too.
  const limits = { maxBytes: 4 * 1024 * 1024, maxHours: 1000, clock: () => Date.now() * 1000 };
  const kills = 20;
  const seed = 7;

  it(`holds every record that was acknowledged, once and in order, after each of ${kills} kills`, async () => {
    const folder = mkdtempSync(join(tmpdir(), 'spanbeat-journal-'));
    try {
      const random = createRandom(seed);
      const all: number[] = [];
      for (let life = 0; life < kills; life++) {
        const acknowledged = await killedWriter(folder, 100_000 * life, random.integer(1, 600));
        all.push(...acknowledged);
        const complaints: Complaint[] = [];
        const journal = await openJournal(folder, { ...limits, report: (one) => void complaints.push(one) });
        const read: number[] = [];
        for await (const { record } of journal.readFrom(null)) {
          const number = numberOf(record);
          read.push(number);
          expect(Buffer.from(record.payload).equals(payloadOf(number)), `seed ${seed}, record ${number}`).toBe(true);
        }
        await journal.close();
        const held = new Set(read);
        expect(read).toEqual([...held].sort((a, b) => a - b));
        expect(
          acknowledged.filter((number) => !held.has(number)),
          `seed ${seed}, life ${life}`,
        ).toEqual([]);
        // Of earlier lives only whole segments have gone, the oldest first.
        expect(all.filter((number) => number >= read[0]! && !held.has(number))).toEqual([]);
        expect(complaints.filter(({ code }) => code !== 'JOURNAL_TAIL')).toEqual([]);
      }
      expect(all.length).toBeGreaterThan(2000);
    } finally {
      rmSync(folder, { recursive: true, force: true });
    }
  });
});

/** Numbers that a writer acknowledged until it was killed, some way after so many. */
async function killedWriter(folder: string, first: number, after: number): Promise<number[]> {
  const script = fileURLToPath(new URL('./writer.ts', import.meta.url));
  const child = spawn(process.execPath, [script, folder, String(first)], { stdio: ['ignore', 'pipe', 'inherit'] });
  let text = '';
  child.stdout.on('data', (chunk: Buffer) => {
    text += chunk.toString();
    if (text.split('\n').length > after) child.kill('SIGKILL');
  });
  await once(child, 'close');
  // The last line may be cut.
  return text.split('\n').slice(0, -1).map(Number);
}

/** Thirty records over several segments, one step of the disk failing; then a healthy restart. */
async function tried(fault: Disk['fault']) {
  const disk = new Disk();
  disk.fault = fault;
  const acknowledged: number[] = [];
  let failed = 0;
  let now = START;
  const open = () => journalOn(disk, { maxBytes: 100e6, clock: () => (now += 1_000_000) });
  const opened = await open().catch(() => null);
  const { journal } = opened ?? (await open());
  for (const i of count(10)) {
    const three = [0, 1, 2].map((k) => outcome(journal.append(recordOf(3 * i + k, 100_000 + 400_000 * k)).durable));
    const outcomes = await Promise.all(three);
    outcomes.forEach((one, k) => (one === 'durable' ? acknowledged.push(3 * i + k) : (failed += 1)));
  }
  await journal.close();
  const { steps } = disk;
  disk.fault = null;
  const { journal: again } = await open();
  return { acknowledged, failed, steps, read: await numbersIn(again) };
}

/** Appends until the power is cut at a random moment; then a restart, more records, and a second cut. */
async function cutOff(random: Random) {
  const disk = new Disk();
  const acknowledged: number[] = [];
  let now = START;
  let number = 0;
  for (let life = 0; life < 3; life++) {
    const { journal } = await journalOn(disk, { maxBytes: 100e6, clock: () => (now += 1_000_000) });
    disk.fault = { step: disk.steps + random.integer(1, 60), code: 'EIO', forever: true };
    const waiting: Promise<unknown>[] = [];
    for (let i = 0; i < 40; i++) {
      const own = number++;
      const { durable } = journal.append(recordOf(own, random.integer(8, 3000)));
      waiting.push(outcome(durable).then((one) => one === 'durable' && acknowledged.push(own)));
      if (random.next() < 0.4) await Promise.all(waiting);
    }
    await Promise.all(waiting);
    disk.fault = null;
    disk.cut(random);
    now += 60_000_000;
  }
  const { journal } = await journalOn(disk, { clock: () => now + 60_000_000 });
  return { acknowledged, read: await numbersIn(journal) };
}
