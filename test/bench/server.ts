import { spawn } from 'node:child_process';
import { once } from 'node:events';
import { mkdtempSync, mkdirSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { setTimeout as sleep } from 'node:timers/promises';
import { stringify } from 'yaml';
import type { SystemStatus } from '#core/contract/status.ts';
import { samplesPayload } from '../../simulator/payload.ts';
import { deckSensor, plainBridge } from '../support/bridges.ts';
import { createRandom } from '../support/random.ts';

export const RATE_HZ = 500;
const CHANNELS = 16;

/** A real server in its own process with `bridges` bridges of 16 channels, on free ports and a folder of its own. */
export interface BenchServer {
  url: string;
  broker: string;
  topic(bridge: number): string;
  /** A block of quiet noise; `shake` adds a sine of that many m/s² to all channels. */
  quiet(bridge: number, startMicros: number, count: number, sequence: number, shake?: number): Buffer;
  /** Resolves when the bridge's newest sample is at least so new. */
  seen(bridge: number, micros: number): Promise<void>;
  residentMegabytes(): Promise<number>;
  stop(): Promise<void>;
}

export async function startBench(bridges: number): Promise<BenchServer> {
  const folder = mkdtempSync(join(tmpdir(), 'spanbeat-bench-'));
  const [port, brokerPort] = [20_000 + (process.pid % 20_000), 40_001 + (process.pid % 20_000)];
  mkdirSync(join(folder, 'bridges'));
  for (let b = 0; b < bridges; b++) {
    const sensors = Array.from({ length: CHANNELS }, (_, i) => deckSensor(`A${i + 1}`, 2 + i, { rateHz: RATE_HZ }));
    writeFileSync(
      join(folder, 'bridges', `b${b}.yaml`),
      stringify({ ...plainBridge({ sensors }), id: `b${b}`, name: `B ${b}` }),
    );
  }
  const words = ['server/main.ts', 'serve', '--bridges', join(folder, 'bridges'), '--data', join(folder, 'data')];
  words.push('--port', String(port), '--broker-port', String(brokerPort), '--log', 'warn');
  const child = spawn(process.execPath, words, { stdio: ['ignore', 'inherit', 'inherit'] });
  const url = `http://127.0.0.1:${port}`;
  const status = async (): Promise<SystemStatus> => (await (await fetch(`${url}/api/status`)).json()) as SystemStatus;
  for (;;) {
    if (child.exitCode !== null) throw new Error(`the server ended with ${child.exitCode}`);
    if ((await status().catch(() => null))?.broker.connected === true) break;
    await sleep(100);
  }
  const random = createRandom(1);
  const noise = Float32Array.from({ length: 20_000 }, () => 0.005 * random.normal());
  return {
    url,
    broker: `mqtt://127.0.0.1:${brokerPort}`,
    topic: (bridge) => `spanbeat/b${bridge}/L1/samples`,
    quiet: (_, startMicros, count, sequence, shake = 0) => {
      const channels = new Map<string, Float32Array>();
      for (let c = 0; c < CHANNELS; c++) {
        const at = (sequence * 997 + c * 613) % (noise.length - count);
        const sine = (i: number): number => shake * Math.sin((2 * Math.PI * 5 * i) / RATE_HZ);
        const samples = noise.slice(at, at + count).map((value, i) => value + sine(i));
        channels.set(`A${c + 1}`, samples);
      }
      return samplesPayload({ startMicros, rateHz: RATE_HZ, sequence, channels });
    },
    seen: async (bridge, micros) => {
      for (;;) {
        const newest = (await status()).bridges.find(({ id }) => id === `b${bridge}`)?.newestMicros ?? 0;
        if (newest >= micros) return;
        await sleep(50);
      }
    },
    residentMegabytes: async () => {
      const metrics = await (await fetch(`${url}/metrics`)).text();
      return Number(/^process_resident_memory_bytes (\S+)/m.exec(metrics)?.[1] ?? NaN) / 1e6;
    },
    stop: async () => {
      child.kill('SIGINT');
      if (child.exitCode === null) await once(child, 'exit');
      rmSync(folder, { recursive: true, force: true });
    },
  };
}
