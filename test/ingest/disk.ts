import type { JournalFiles, OpenFile } from '../../server/ingest/journal-files.ts';
import type { Random } from '../support/random.ts';

interface Node {
  /** What a reader sees. */
  bytes: Buffer;
  /** What a power cut leaves for certain. */
  synced: Buffer;
  /** Its name is durable. */
  named: boolean;
}

/**
 * A disk in memory that forgets what was not synced, and fails when told to: what the journal promises can be tried at
 * every step.
 */
export class Disk implements JournalFiles {
  readonly nodes = new Map<string, Node>();
  syncs = 0;
  /** Steps that change the disk, so far. */
  steps = 0;
  /** The step that fails, and how; every step from there on while `forever`. */
  fault: { step: number; code: string; forever?: boolean } | null = null;
  /** Held before each sync ends; for tests that look in between. */
  beforeSync: () => Promise<void> = () => Promise.resolve();
  /** Files that can no longer be read, as on a bad sector. */
  readonly unreadable = new Set<string>();

  /** Lets no file be removed. */
  keepsFiles = false;

  /** Puts a file there as an earlier life left it. */
  put(path: string, bytes: Buffer): void {
    this.nodes.set(path, { bytes, synced: Buffer.from(bytes), named: true });
  }

  /** Cuts the power: of what was not synced, each file keeps a random part of its newest bytes, or its name is lost. */
  cut(random: Random): void {
    for (const [path, node] of this.nodes) {
      if (!node.named && random.next() < 0.5) {
        this.nodes.delete(path);
        continue;
      }
      const longer = node.bytes.length - node.synced.length;
      const kept = longer > 0 ? random.integer(0, longer) : 0;
      const tail = Buffer.from(node.bytes.subarray(node.synced.length, node.synced.length + kept));
      // A sector that was never written reads as anything.
      if (kept > 0 && random.next() < 0.3) tail.fill(0, random.integer(0, kept - 1));
      node.bytes = Buffer.concat([node.synced, tail]);
      node.synced = Buffer.from(node.bytes);
      node.named = true;
    }
  }

  makeFolder(): Promise<void> {
    return this.#step();
  }

  list(folder: string): Promise<string[]> {
    const names = [...this.nodes.keys()].filter((path) => path.startsWith(`${folder}/`));
    return Promise.resolve(names.map((path) => path.slice(folder.length + 1)).filter((name) => !name.includes('/')));
  }

  async create(path: string): Promise<OpenFile> {
    await this.#step();
    if (this.nodes.has(path)) throw failure('EEXIST');
    const node: Node = { bytes: Buffer.alloc(0), synced: Buffer.alloc(0), named: false };
    this.nodes.set(path, node);
    return {
      write: async (bytes, position) => {
        await this.#step();
        // Now and then a disk takes only a part.
        const taken = bytes.length > 100 && this.steps % 5 === 0 ? bytes.length - 50 : bytes.length;
        const grown = Buffer.alloc(Math.max(node.bytes.length, position + taken));
        node.bytes.copy(grown);
        grown.set(bytes.subarray(0, taken), position);
        node.bytes = grown;
        return taken;
      },
      sync: async () => {
        await this.beforeSync();
        await this.#step();
        this.syncs += 1;
        node.synced = Buffer.from(node.bytes);
      },
      truncate: async (bytes) => {
        await this.#step();
        node.bytes = Buffer.from(node.bytes.subarray(0, bytes));
      },
      close: () => Promise.resolve(),
    };
  }

  read(path: string, most?: number): Promise<Buffer> {
    const node = this.nodes.get(path);
    if (node === undefined) return Promise.reject(failure('ENOENT'));
    if (this.unreadable.has(path)) return Promise.reject(failure('EIO'));
    return Promise.resolve(Buffer.from(node.bytes.subarray(0, most)));
  }

  size(path: string): Promise<number> {
    return Promise.resolve(this.nodes.get(path)!.bytes.length);
  }

  async truncate(path: string, bytes: number): Promise<void> {
    await this.#step();
    const node = this.nodes.get(path)!;
    node.bytes = Buffer.from(node.bytes.subarray(0, bytes));
    node.synced = Buffer.from(node.bytes);
  }

  async copy(from: string, to: string): Promise<void> {
    await this.#step();
    const bytes = Buffer.from(this.nodes.get(from)!.bytes);
    this.nodes.set(to, { bytes, synced: bytes, named: true });
  }

  async remove(path: string): Promise<void> {
    await this.#step();
    if (this.keepsFiles) throw failure('EPERM');
    this.nodes.delete(path);
  }

  async syncFolder(): Promise<void> {
    await this.#step();
    for (const node of this.nodes.values()) node.named = true;
  }

  async #step(): Promise<void> {
    await Promise.resolve();
    this.steps += 1;
    const { fault } = this;
    if (fault !== null && (this.steps === fault.step || (fault.forever === true && this.steps > fault.step))) {
      throw failure(fault.code);
    }
  }
}

function failure(code: string): Error {
  return Object.assign(new Error(`${code}: told to fail`), { code });
}
