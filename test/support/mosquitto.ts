import { spawn, type ChildProcess } from 'node:child_process';
import { mkdtempSync, rmSync, writeFileSync } from 'node:fs';
import { connect, createServer, type AddressInfo } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { programOf } from './debian.ts';

/** A Mosquitto of the test's own on the loopback. */
export interface Mosquitto {
  port: number;
  url: string;
  /** Ends it by its process id. Sessions are kept in its folder for `start`. */
  stop(): Promise<void>;
  start(): Promise<void>;
  /** Ends it and removes its folder. */
  remove(): Promise<void>;
}

/**
 * @param lines further lines of its configuration, such as `max_inflight_messages 100`
 */
export async function startMosquitto(lines: readonly string[] = []): Promise<Mosquitto> {
  const program = programOf('mosquitto');
  if (program === null) throw new Error('mosquitto is not installed');
  const folder = mkdtempSync(join(tmpdir(), 'spanbeat-mosquitto-'));
  const port = await freePort();
  const config = join(folder, 'mosquitto.conf');
  writeFileSync(
    config,
    [
      `listener ${port} 127.0.0.1`,
      'allow_anonymous true',
      'persistence true',
      `persistence_location ${folder}/`,
      // Started as root it would become a user who may not write into the folder.
      ...(process.getuid?.() === 0 ? ['user root'] : []),
      'log_dest stderr',
      ...lines,
      '',
    ].join('\n'),
  );
  let child: ChildProcess | null = null;
  const start = async (): Promise<void> => {
    const started = spawn(program, ['-c', config], { stdio: 'ignore' });
    child = started;
    await answering(port, started);
  };
  const stop = async (): Promise<void> => {
    const running = child;
    child = null;
    if (running === null || running.exitCode !== null) return;
    const ended = new Promise((resolve) => running.once('exit', resolve));
    running.kill('SIGTERM');
    await ended;
  };
  await start();
  return {
    port,
    url: `mqtt://127.0.0.1:${port}`,
    start,
    stop,
    async remove() {
      await stop();
      rmSync(folder, { recursive: true, force: true });
    },
  };
}

/** A port of the loopback that nobody listened on a moment ago. */
export async function freePort(): Promise<number> {
  const server = createServer();
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
  const { port } = server.address() as AddressInfo;
  await new Promise((resolve) => server.close(resolve));
  return port;
}

async function answering(port: number, child: ChildProcess): Promise<void> {
  for (let tries = 0; tries < 400; tries += 1) {
    if (child.exitCode !== null) throw new Error(`mosquitto ended with ${child.exitCode}`);
    if (await answers(port)) return;
    await new Promise((resolve) => setTimeout(resolve, 25));
  }
  throw new Error(`mosquitto does not answer on port ${port}`);
}

function answers(port: number): Promise<boolean> {
  return new Promise((resolve) => {
    const socket = connect(port, '127.0.0.1');
    socket.once('connect', () => {
      socket.destroy();
      resolve(true);
    });
    socket.once('error', () => resolve(false));
  });
}
