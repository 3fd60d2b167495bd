import { spawn, type ChildProcess } from 'node:child_process';
import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';

/** The real program in a process of its own, as a person starts it. */
export interface ServerProcess {
  /** Address of the page. */
  url: string;
  /** Address where loggers connect, where the program said it. */
  brokerUrl: string;
  pid: number;
  /** Milliseconds from the start to the line with the address. */
  startedMs: number;
  /** What it wrote to standard output and standard error so far. */
  output(): string;
  /** Ctrl-C, as a terminal sends it: SIGINT to the whole group. Resolves when it has ended. @returns its exit code */
  interrupt(): Promise<number | null>;
  /** SIGKILL to the whole group: a power cut. */
  kill(): Promise<void>;
  /** Whether any process of its group still exists. */
  groupAlive(): boolean;
}

export const ROOT = join(import.meta.dirname, '..', '..');

/** A loaded machine may take long; what takes longer is broken. */
const START_LIMIT_MS = 180_000;
const STOP_LIMIT_MS = 60_000;
const OUTPUT_KEPT = 100_000;

/**
 * Starts the program and waits for the line that names its page.
 *
 * @param words of the command line, as `['demo', '--port', '0']`; the first may be another program: see `program`
 * @param program what to run; the program's own entry by this Node where absent
 */
export async function startServerProcess(
  words: readonly string[],
  program: readonly [string, ...string[]] = [process.execPath, 'server/main.ts'],
): Promise<ServerProcess> {
  const [command, ...before] = program;
  const begunMs = performance.now();
  // A group of its own: a signal to it reaches its children, and no other process of the test.
  const child = spawn(command, [...before, ...words], { cwd: ROOT, detached: true, stdio: ['ignore', 'pipe', 'pipe'] });
  let output = '';
  const keep = (part: Buffer): void => {
    output = (output + part.toString()).slice(-OUTPUT_KEPT);
  };
  child.stdout.on('data', keep);
  child.stderr.on('data', keep);
  const ended = new Promise<number | null>((resolve) => child.once('close', (code) => resolve(code)));
  const { pid } = child;
  if (pid === undefined) throw new Error(`${command} could not be started`);
  const signal = (name: NodeJS.Signals): void => {
    if (groupAlive(pid)) process.kill(-pid, name);
  };
  const kill = async (): Promise<void> => {
    signal('SIGKILL');
    await ended;
  };
  try {
    const url = await address(child, () => output, ended);
    const brokerUrl = /mqtts?:\/\/[\w.:[\]-]+/.exec(output)?.[0] ?? '';
    return {
      url,
      brokerUrl,
      pid,
      startedMs: performance.now() - begunMs,
      output: () => output,
      async interrupt() {
        signal('SIGINT');
        return within(ended, STOP_LIMIT_MS, () => `it did not end after Ctrl-C\n${output}`);
      },
      kill,
      groupAlive: () => groupAlive(pid),
    };
  } catch (failure) {
    await kill();
    throw failure;
  }
}

/** A folder of its own for the data of a server, and its removal. */
export async function temporaryFolder(name: string): Promise<{ path: string; remove(): Promise<void> }> {
  const path = await mkdtemp(join(tmpdir(), `spanbeat-${name}-`));
  return { path, remove: () => rm(path, { recursive: true, force: true }) };
}

/** Asks again until the answer is there. @throws where it does not come within the limit */
export async function until<T>(
  what: string,
  question: () => Promise<T | null | undefined | false>,
  limitMs = 120_000,
): Promise<T> {
  const endMs = performance.now() + limitMs;
  let last: unknown = null;
  while (performance.now() < endMs) {
    try {
      const answer = await question();
      if (answer !== null && answer !== undefined && answer !== false) return answer;
    } catch (failure) {
      last = failure; // the server may be away meanwhile; told if it stays so
    }
    await new Promise((resolve) => setTimeout(resolve, 200));
  }
  const why = last instanceof Error ? `: ${last.message}` : '';
  throw new Error(`${what} did not come within ${limitMs / 1000} s${why}`);
}

/** The JSON of one of the server's answers. */
export async function ask<T>(server: { url: string }, path: string): Promise<T> {
  const answer = await fetch(new URL(path, server.url));
  if (!answer.ok) throw new Error(`${path} answers ${answer.status}`);
  return (await answer.json()) as T;
}

function groupAlive(pid: number): boolean {
  try {
    process.kill(-pid, 0);
    return true;
  } catch (failure) {
    if (failure instanceof Error && 'code' in failure && failure.code === 'ESRCH') return false;
    throw failure;
  }
}

async function address(child: ChildProcess, output: () => string, ended: Promise<number | null>): Promise<string> {
  const found = new Promise<string>((resolve) => {
    const look = (): void => {
      const line = /Spanbeat.*?(https?:\/\/[\w.:[\]-]+)/.exec(output());
      if (line?.[1] !== undefined) resolve(line[1]);
    };
    child.stdout?.on('data', look);
  });
  const early = ended.then((code) => Promise.reject(new Error(`it ended at once with ${code}\n${output()}`)));
  return within(Promise.race([found, early]), START_LIMIT_MS, () => `it did not name its page\n${output()}`);
}

async function within<T>(promise: Promise<T>, limitMs: number, why: () => string): Promise<T> {
  let timer: NodeJS.Timeout | undefined;
  const late = new Promise<never>((_, reject) => {
    timer = setTimeout(() => reject(new Error(`${why()} (after ${limitMs / 1000} s)`)), limitMs);
  });
  try {
    return await Promise.race([promise, late]);
  } finally {
    clearTimeout(timer);
  }
}
