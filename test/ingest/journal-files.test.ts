import { mkdtempSync, rmSync, writeFileSync } from 'node:fs';
import { open } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, it } from 'vitest';
import type { Complaint } from '#core/contract/errors.ts';
import { nodeFiles, type JournalFiles } from '../../server/ingest/journal-files.ts';
import { openJournal, type Journal } from '../../server/ingest/journal.ts';

let folder: string;
let complaints: Complaint[];

beforeEach(() => {
  folder = mkdtempSync(join(tmpdir(), 'spanbeat-files-'));
  complaints = [];
});
afterEach(() => rmSync(folder, { recursive: true, force: true }));

const path = (name: string): string => join(folder, name);

const openIn = (name: string, files?: JournalFiles): Promise<Journal> =>
  openJournal(path(name), {
    maxBytes: 1e9,
    maxHours: 1000,
    clock: () => 1_780_000_000_000_000,
    report: (complaint) => void complaints.push(complaint),
    ...(files === undefined ? {} : { files }),
  });

const record = (text: string): { receivedMicros: number; topic: string; payload: Buffer } => ({
  receivedMicros: 1_780_000_000_000_000,
  topic: 'spanbeat/b/L1/samples',
  payload: Buffer.from(text),
});

async function textsIn(journal: Journal): Promise<string[]> {
  const texts: string[] = [];
  for await (const { record: one } of journal.readFrom(null)) texts.push(Buffer.from(one.payload).toString());
  return texts;
}

describe('the files of the journal', () => {
  it('are written at the place that is named, and read whole, in part, and beyond their end', async () => {
    const file = await nodeFiles.create(path('a'));
    expect(await file.write(Buffer.from('world'), 6)).toBe(5);
    expect(await file.write(Buffer.from('hello '), 0)).toBe(6);
    await file.sync();
    expect((await nodeFiles.read(path('a'))).toString()).toBe('hello world');
    expect((await nodeFiles.read(path('a'), 5)).toString()).toBe('hello');
    expect((await nodeFiles.read(path('a'), 50)).toString()).toBe('hello world');
    expect(await nodeFiles.size(path('a'))).toBe(11);
    await file.truncate(5);
    await file.close();
    await nodeFiles.truncate(path('a'), 4);
    expect((await nodeFiles.read(path('a'))).toString()).toBe('hell');
  });

  it('are never written over: a name that is taken is refused', async () => {
    writeFileSync(path('a'), 'kept');
    await expect(nodeFiles.create(path('a'))).rejects.toMatchObject({ code: 'EEXIST' });
    expect((await nodeFiles.read(path('a'))).toString()).toBe('kept');
  });

  it('are copied, listed, removed, and removed again without complaint', async () => {
    await nodeFiles.makeFolder(path('deep/er'));
    await nodeFiles.makeFolder(path('deep/er'));
    writeFileSync(path('deep/er/a'), 'text');
    await nodeFiles.copy(path('deep/er/a'), path('deep/er/b'));
    await nodeFiles.syncFolder(path('deep/er'));
    expect((await nodeFiles.list(path('deep/er'))).toSorted()).toEqual(['a', 'b']);
    await nodeFiles.remove(path('deep/er/a'));
    await nodeFiles.remove(path('deep/er/a'));
    expect(await nodeFiles.list(path('deep/er'))).toEqual(['b']);
  });
});

describe('the journal on the disk of this machine', () => {
  it('says with a code that its folder is none, or lies in none', async () => {
    writeFileSync(path('file'), '');
    await expect(openIn('file')).rejects.toMatchObject({ code: 'JOURNAL_WRITE', where: path('file') });
    await expect(openIn('file/journal')).rejects.toMatchObject({ code: 'JOURNAL_WRITE' });
  });

  it('acknowledges nothing while the system itself says that the disk is full, and takes it all afterwards', async () => {
    // Writing to this device fails as on a full disk (Linux, full(4)).
    const full = await open('/dev/full', 'w');
    let isFull = false;
    const journal = await openIn('journal', {
      ...nodeFiles,
      create: async (name) => {
        const file = await nodeFiles.create(name);
        const write: typeof file.write = async (bytes, position) =>
          isFull ? (await full.write(bytes, 0, bytes.length)).bytesWritten : file.write(bytes, position);
        return { ...file, write };
      },
    });
    await journal.append(record('before')).durable;
    isFull = true;
    for (const text of ['one', 'two']) {
      await expect(journal.append(record(text)).durable).rejects.toMatchObject({ code: 'DISK_FULL' });
    }
    expect(journal.status().full).toBe(true);
    expect(complaints.map(({ code }) => code)).toEqual(['DISK_FULL']);
    isFull = false;
    for (const text of ['one', 'two']) await journal.append(record(text)).durable;
    expect(journal.status().full).toBe(false);
    await journal.close();
    await full.close();
    complaints = [];
    expect(await textsIn(await openIn('journal'))).toEqual(['before', 'one', 'two']);
    expect(complaints).toEqual([]);
  });

  it('keeps foreign files in its folder as they are', async () => {
    const first = await openIn('journal');
    await first.append(record('own')).durable;
    await first.close();
    writeFileSync(path('journal/notes.txt'), 'mine');
    writeFileSync(path('journal/12.journal'), 'no segment');
    const again = await openIn('journal');
    expect(await textsIn(again)).toEqual(['own']);
    await again.close();
    expect((await nodeFiles.read(path('journal/notes.txt'))).toString()).toBe('mine');
    expect((await nodeFiles.read(path('journal/12.journal'))).toString()).toBe('no segment');
  });
});
