import { setTimeout as sleep } from 'node:timers/promises';
import { connectAsync } from 'mqtt';
import { WebSocket } from 'ws';
import type { ServerMessage } from '#core/contract/live.ts';
import { RATE_HZ, startBench } from './server.ts';
import type { Figure } from './figure.ts';

const BRIDGES = 10;
const BLOCK = 50;
const SECONDS = 100;
/** A bridge is shaken once in so many seconds; the alarm before has returned by then. */
const EVERY_SECONDS = 16;

/** From the publishing of the block that passes a limit to the alarm in a WebSocket client, ten bridges in real time. */
export async function benchLatency(): Promise<Figure[]> {
  const bench = await startBench(BRIDGES);
  try {
    const client = await connectAsync(bench.broker);
    const sentAt = new Map<string, number>();
    const latencies: number[] = [];
    const socket = new WebSocket(`${bench.url.replace('http', 'ws')}/live`);
    socket.on('message', (data: Buffer, binary: boolean) => {
      if (binary) return;
      const message = JSON.parse(data.toString()) as ServerMessage;
      if (message.type !== 'alarm' || message.alarm.kind !== 'level') return;
      const sent = sentAt.get(message.alarm.bridge);
      if (sent === undefined) return;
      sentAt.delete(message.alarm.bridge);
      latencies.push(performance.now() - sent);
    });
    const started = performance.now();
    const first = Date.now() * 1000;
    const before = await bench.residentMegabytes();
    for (let i = 0; i < (SECONDS * RATE_HZ) / BLOCK; i++) {
      const seconds = (i * BLOCK) / RATE_HZ;
      await sleep(Math.max(0, started + seconds * 1000 - performance.now()));
      for (let b = 0; b < BRIDGES; b++) {
        const phase = (seconds + (b * EVERY_SECONDS) / BRIDGES) % EVERY_SECONDS;
        const shakes = seconds > 5 && phase < BLOCK / RATE_HZ;
        const payload = bench.quiet(b, first + Math.round(seconds * 1e6), BLOCK, i, shakes ? 8 : 0);
        if (shakes) sentAt.set(`b${b}`, performance.now());
        void client.publishAsync(bench.topic(b), payload, { qos: 1 }).catch(() => undefined);
      }
    }
    await sleep(1000);
    const after = await bench.residentMegabytes();
    socket.close();
    await client.endAsync();
    latencies.sort((a, b) => a - b);
    const at = (share: number): number =>
      latencies[Math.min(latencies.length - 1, Math.floor(share * latencies.length))] ?? NaN;
    return [
      { what: `alarms at ${BRIDGES} bridges x 16 channels x ${RATE_HZ} Hz`, value: latencies.length, unit: '' },
      { what: 'block published to alarm in the viewer, p50', value: at(0.5), unit: 'ms' },
      { what: 'block published to alarm in the viewer, p99', value: at(0.99), unit: 'ms', aim: '<= 100' },
      { what: `resident memory, start and after ${SECONDS} s`, value: before, unit: 'MB' },
      { what: '', value: after, unit: 'MB' },
    ];
  } finally {
    await bench.stop();
  }
}
