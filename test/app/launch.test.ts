import { spawn, type ChildProcess } from 'node:child_process';
import { readdir, readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterEach, beforeEach, expect, test } from 'vitest';
import { ROOT, temporaryFolder, until } from '../support/server.ts';

/** Starts a server, says its process id, and waits, as npm does. Killed, it passes nothing on. */
const STARTER = `
  const child = require('node:child_process').spawn(process.execPath, process.argv.slice(1), { stdio: 'inherit' });
  process.stdout.write('server process ' + child.pid + '\\n');
  child.once('exit', (code) => process.exit(code ?? 1));
`;

let folder: { path: string; remove(): Promise<void> };
beforeEach(async () => {
  folder = await temporaryFolder('launch');
});
afterEach(() => folder.remove());

test('what npm installs runs the program: the shell has looked up another Node by then', async () => {
  const { scripts } = JSON.parse(await readFile(join(ROOT, 'package.json'), 'utf8')) as {
    scripts: Record<string, string>;
  };
  const programs = ['demo', 'start', 'spanbeat', 'bench'].map((name) => scripts[name]);
  // `exec`: signals that npm passes on reach the program and not a shell.
  for (const line of programs) expect(line).toMatch(/^node server\/prepare\.mjs .*&& exec node_modules\/\.bin\/node /);
});

test('a server that npm runs stops in order when npm is killed', async () => {
  const { pid, starter } = await startUnder({ npm_lifecycle_script: 'exec node server/main.ts serve' });
  starter.kill('SIGKILL');
  await until('the end of the server', () => Promise.resolve(!isAlive(pid)), 30_000);
  // The last thing that a stop in order writes.
  expect(await readdir(join(folder.path, 'snapshots'))).toContain('fennick.snapshot');
});

test('a server that a shell put into the background stays when the shell ends', async () => {
  const { pid, starter } = await startUnder({ npm_lifecycle_script: '' });
  starter.kill('SIGKILL');
  // Twice as long as a server under npm needs to notice.
  await new Promise((resolve) => setTimeout(resolve, 2_500));
  expect(isAlive(pid)).toBe(true);
  process.kill(pid, 'SIGTERM');
  await until('the end of the server', () => Promise.resolve(!isAlive(pid)), 30_000);
});

test('a Ctrl-C that comes from the terminal and from npm stops a server in order', async () => {
  const { pid, starter } = await startUnder({ npm_lifecycle_script: 'exec node server/main.ts serve' });
  const ended = new Promise((resolve) => starter.once('close', resolve));
  process.kill(pid, 'SIGINT');
  process.kill(pid, 'SIGINT');
  await ended;
  expect(starter.exitCode).toBe(0);
});

async function startUnder(environment: Record<string, string>): Promise<{ pid: number; starter: ChildProcess }> {
  const words = [
    '--bridges',
    'simulator/bridges/fennick.yaml',
    '--data',
    folder.path,
    '--port',
    '0',
    '--broker-port',
    '0',
  ];
  const starter = spawn(process.execPath, ['-e', STARTER, '--', 'server/main.ts', 'serve', ...words], {
    cwd: ROOT,
    env: { ...process.env, ...environment },
    stdio: ['ignore', 'pipe', 'inherit'],
  });
  let output = '';
  starter.stdout.on('data', (part) => (output += String(part)));
  await until('the address of the server', () => Promise.resolve(output.includes('http://')));
  return { pid: Number(/server process (\d+)/.exec(output)?.[1]), starter };
}

function isAlive(pid: number): boolean {
  try {
    return process.kill(pid, 0);
  } catch {
    return false; // ESRCH: there is none
  }
}
