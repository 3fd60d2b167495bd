import { copyFile, mkdir, open, readdir, readFile, rm } from 'node:fs/promises';
import { join } from 'node:path';

/** What the journal asks of the file system; tests hand in one that fails when told to. */
export interface JournalFiles {
  /** Makes the folder and its parents; nothing where it exists. */
  makeFolder(path: string): Promise<void>;
  list(path: string): Promise<string[]>;
  /** A new file for writing; fails where one of the name exists. */
  create(path: string): Promise<OpenFile>;
  /** The whole file, or its first bytes. */
  read(path: string, most?: number): Promise<Buffer>;
  size(path: string): Promise<number>;
  truncate(path: string, bytes: number): Promise<void>;
  copy(from: string, to: string): Promise<void>;
  /** Nothing where it does not exist. */
  remove(path: string): Promise<void>;
  /** Makes created and removed names durable. */
  syncFolder(path: string): Promise<void>;
}

export interface OpenFile {
  /** Writes part or all of the bytes at a place in the file; returns how many. */
  write(bytes: Uint8Array, position: number): Promise<number>;
  sync(): Promise<void>;
  truncate(bytes: number): Promise<void>;
  close(): Promise<void>;
}

export const nodeFiles: JournalFiles = {
  async makeFolder(path) {
    await mkdir(path, { recursive: true });
  },
  list: (path) => readdir(path),
  async create(path) {
    const handle = await open(path, 'wx');
    return {
      write: async (bytes, position) => (await handle.write(bytes, 0, bytes.length, position)).bytesWritten,
      sync: () => handle.datasync(),
      truncate: (bytes) => handle.truncate(bytes),
      close: () => handle.close(),
    };
  },
  async read(path, most) {
    if (most === undefined) return readFile(path);
    return withHandle(path, 'r', async (handle) => {
      const bytes = Buffer.alloc(Math.min(most, (await handle.stat()).size));
      let at = 0;
      while (at < bytes.length) {
        const { bytesRead } = await handle.read(bytes, at, bytes.length - at, at);
        if (bytesRead === 0) break;
        at += bytesRead;
      }
      return bytes.subarray(0, at);
    });
  },
  size: (path) => withHandle(path, 'r', async (handle) => (await handle.stat()).size),
  truncate: (path, bytes) =>
    withHandle(path, 'r+', async (handle) => {
      await handle.truncate(bytes);
      await handle.sync();
    }),
  copy: (from, to) => copyFile(from, to),
  remove: (path) => rm(path, { force: true }),
  syncFolder: (path) => withHandle(join(path), 'r', (handle) => handle.sync()),
};

type Handle = Awaited<ReturnType<typeof open>>;

async function withHandle<T>(path: string, flags: string, use: (handle: Handle) => Promise<T>): Promise<T> {
  const handle = await open(path, flags);
  try {
    return await use(handle);
  } finally {
    await handle.close();
  }
}
