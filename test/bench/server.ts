import { spawn } from 'node:child_process';
import { once } from 'node:events';
import { mkdtempSync, mkdirSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { setTimeout as sleep } from 'node:timers/promises';
import { stringify } from 'yaml';
import type { SystemStatus } from '#core/contract/status.ts';
import { benchBridge } from './traffic.ts';

/** Figures of the server, by name and labels as the Prometheus format writes them. */
export type Metrics = ReadonlyMap<string, number>;

/** A real server in its own process with `bridges` bridges of 16 channels, on free ports and a folder of its own. */
export interface BenchServer {
  url: string;
  broker: string;
  topic(bridge: number): string;
  /** Resolves when the bridge's newest sample is at least so new. */
  seen(bridge: number, micros: number): Promise<void>;
  metrics(): Promise<Metrics>;
  stop(): Promise<void>;
}

export async function startBench(bridges: number): Promise<BenchServer> {
  const folder = mkdtempSync(join(tmpdir(), 'spanbeat-bench-'));
  const [port, brokerPort] = [20_000 + (process.pid % 20_000), 40_001 + (process.pid % 20_000)];
  mkdirSync(join(folder, 'bridges'));
  for (let b = 0; b < bridges; b++) {
    writeFileSync(join(folder, 'bridges', `b${b}.yaml`), stringify({ ...benchBridge(), id: `b${b}`, name: `B ${b}` }));
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
  return {
    url,
    broker: `mqtt://127.0.0.1:${brokerPort}`,
    topic: (bridge) => `spanbeat/b${bridge}/L1/samples`,
    seen: async (bridge, micros) => {
      for (;;) {
        const newest = (await status()).bridges.find(({ id }) => id === `b${bridge}`)?.newestMicros ?? 0;
        if (newest >= micros) return;
        await sleep(50);
      }
    },
    metrics: async () => {
      const text = await (await fetch(`${url}/metrics`)).text();
      const lines = text.split('\n').filter((line) => line !== '' && !line.startsWith('#'));
      return new Map(
        lines.map((line) => [line.slice(0, line.lastIndexOf(' ')), Number(line.slice(line.lastIndexOf(' ')))]),
      );
    },
    stop: async () => {
      child.kill('SIGINT');
      if (child.exitCode === null) await once(child, 'exit');
      rmSync(folder, { recursive: true, force: true });
    },
  };
}
