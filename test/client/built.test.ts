import { execFileSync } from 'node:child_process';
import { readdirSync, readFileSync } from 'node:fs';
import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { extname, join } from 'node:path';
import { gzipSync } from 'node:zlib';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { ROOT } from '../support/server.ts';

/** What a page may weigh on its way, without type, bytes: CSS, scripts, documents, each compressed by itself. */
const MOST_BYTES = 160_000;

describe('the built pages, whatever NODE_ENV says', () => {
  let folder: string;
  let files: { name: string; content: Buffer }[];

  beforeAll(async () => {
    folder = await mkdtemp(join(tmpdir(), 'spanbeat-pages-'));
    const vite = join(ROOT, 'node_modules', 'vite', 'bin', 'vite.js');
    execFileSync(process.execPath, [vite, 'build', 'client', '--outDir', folder, '--logLevel', 'error'], {
      cwd: ROOT,
      env: { ...process.env, NODE_ENV: 'test' },
    });
    files = readdirSync(folder, { recursive: true, withFileTypes: true })
      .filter((entry) => entry.isFile() && !extname(entry.name).startsWith('.woff'))
      .map(({ name, parentPath }) => ({ name, content: readFileSync(join(parentPath, name)) }));
  });
  afterAll(() => rm(folder, { recursive: true, force: true }));

  it('weigh less than 160 kB compressed, type not counted', () => {
    const bytes = files.reduce((sum, { content }) => sum + gzipSync(content, { level: 9 }).length, 0);
    expect(files.map(({ name }) => extname(name))).toContain('.js');
    expect(bytes).toBeLessThan(MOST_BYTES);
  });

  it('are those for use, not for development: no script names its source', () => {
    const telling = files.filter(({ name, content }) => name.endsWith('.js') && content.includes('.svelte`'));
    expect(telling.map(({ name }) => name)).toEqual([]);
  });
});
