import { monitorEventLoopDelay } from 'node:perf_hooks';
import { setTimeout as sleep } from 'node:timers/promises';
import { connectAsync, type MqttClient } from 'mqtt';
import { WebSocket } from 'ws';
import type { Alarm } from '#core/contract/alarm.ts';
import type { ServerMessage } from '#core/contract/live.ts';
import { quantile, type Figure } from './figure.ts';
import { startBench, type BenchServer, type Metrics } from './server.ts';
import { benchLoop, CHANNELS, LOOP_SECONDS, RATE_HZ, type Loop } from './traffic.ts';

const BRIDGES = 10;
const BLOCK = 50;
const BLOCK_SECONDS = BLOCK / RATE_HZ;
/** Two limits raise an alarm each for every train: at least 200 in all. Far more trains than any line has. */
const SECONDS = 300;
/** Loops of different lengths: trains of one bridge meet the measuring of another's in every way there is. */
const secondsOf = (bridge: number): number => LOOP_SECONDS + 0.3 * bridge;
const STAGES = ['journal', 'queue', 'step', 'return', 'tell'];

/**
 * From the publishing of the block in which a level is passed to the alarm in a WebSocket client, ten bridges in real
 * time, each with a logger of its own, while their passages are measured and stored. Alarms of the cold start count.
 */
export async function benchLatency(): Promise<Figure[]> {
  const bench = await startBench(BRIDGES);
  try {
    const loops = Array.from({ length: BRIDGES }, (_, b) => benchLoop(true, 3 + b, secondsOf(b)));
    const clients = await Promise.all(Array.from({ length: BRIDGES }, () => connectAsync(bench.broker)));
    const first = Date.now() * 1000;
    const own = monitorEventLoopDelay({ resolution: 1 });
    own.enable();
    const viewer = watchAlarms(bench, first);
    const before = await bench.metrics();
    await publishAll(bench, loops, clients, first, viewer.sentAt);
    await sleep(1000);
    const after = await bench.metrics();
    viewer.close();
    await Promise.all(clients.map((client) => client.endAsync()));
    return figures(viewer, before, after, own.percentile(99) / 1e6);
  } finally {
    await bench.stop();
  }
}

interface Viewer {
  /** When each block of each bridge went out, ms. */
  sentAt: Map<number, number>[];
  /** Latencies, ms. */
  raised: number[];
  escalated: number[];
  close(): void;
}

function watchAlarms({ url }: BenchServer, first: number): Viewer {
  const sentAt = Array.from({ length: BRIDGES }, () => new Map<number, number>());
  const viewer: Viewer = { sentAt, raised: [], escalated: [], close: () => socket.close() };
  const seen = new Set<string>();
  const socket = new WebSocket(`${url.replace('http', 'ws')}/live`);
  socket.on('message', (data: Buffer, binary: boolean) => {
    const nowMs = performance.now();
    if (binary) return;
    const message = JSON.parse(data.toString()) as ServerMessage;
    if (message.type !== 'alarm' || message.alarm.kind !== 'level') return;
    for (const { what, micros } of newSteps(message.alarm, seen)) {
      const block = Math.floor((micros - first) / (BLOCK_SECONDS * 1e6));
      const sent = sentAt[Number(message.alarm.bridge.slice(1))]?.get(block);
      if (sent === undefined) throw new Error(`an alarm of ${message.alarm.id} before its block`);
      (what === 'raised' ? viewer.raised : viewer.escalated).push(nowMs - sent);
    }
  });
  return viewer;
}

/** What the blocks did; what the record says of them afterwards is no matter of latency. */
function newSteps({ id, steps }: Alarm, seen: Set<string>): Alarm['steps'] {
  return steps.filter(({ what, severity, micros }) => {
    const key = `${id} ${what} ${severity} ${micros}`;
    if ((what !== 'raised' && what !== 'escalated') || seen.has(key)) return false;
    seen.add(key);
    return true;
  });
}

async function publishAll(
  bench: BenchServer,
  loops: readonly Loop[],
  clients: readonly MqttClient[],
  first: number,
  sentAt: readonly Map<number, number>[],
): Promise<void> {
  const started = performance.now();
  for (let i = 0; i < SECONDS / BLOCK_SECONDS; i++) {
    await sleep(Math.max(0, started + (i + 1) * BLOCK_SECONDS * 1000 - performance.now()));
    for (const [b, client] of clients.entries()) {
      const index = i + Math.round((b * secondsOf(b)) / BRIDGES / BLOCK_SECONDS);
      const payload = loops[b]!.payload(index, BLOCK, first + Math.round(i * BLOCK_SECONDS * 1e6));
      sentAt[b]!.set(i, performance.now());
      void client.publishAsync(bench.topic(b), payload, { qos: 1 }).catch(() => undefined);
    }
  }
}

function figures({ raised, escalated }: Viewer, before: Metrics, after: Metrics, ownDelayMs: number): Figure[] {
  const all = [...raised, ...escalated];
  const what = 'block published to alarm in the viewer';
  const aim = '<= 100';
  const stages = STAGES.flatMap((stage) =>
    (['0.5', '0.99', '1'] as const).map((share) => ({
      what: `  stage "${stage}" of all blocks, ${share === '1' ? 'longest' : `p${Number(share) * 100}`}`,
      value: (after.get(`spanbeat_stage_seconds{stage="${stage}",quantile="${share}"}`) ?? NaN) * 1000,
      unit: 'ms',
    })),
  );
  const megabytes = (from: Metrics): number => (from.get('process_resident_memory_bytes') ?? NaN) / 1e6;
  return [
    {
      what: `alarms raised, ${BRIDGES} bridges x ${CHANNELS} channels x ${RATE_HZ} Hz`,
      value: raised.length,
      unit: '',
    },
    { what: `${what}, p50`, value: quantile(raised, 0.5), unit: 'ms' },
    { what: `${what}, p99`, value: quantile(raised, 0.99), unit: 'ms', aim },
    { what: `${what}, longest`, value: quantile(raised, 1), unit: 'ms' },
    { what: 'alarms raised or escalated', value: all.length, unit: '' },
    { what: `${what}, p50`, value: quantile(all, 0.5), unit: 'ms' },
    { what: `${what}, p99`, value: quantile(all, 0.99), unit: 'ms', aim },
    { what: `${what}, longest`, value: quantile(all, 1), unit: 'ms' },
    ...stages,
    { what: "  delay of the bench's own event loop, 1 ms of it its timer, p99", value: ownDelayMs, unit: 'ms' },
    { what: 'resident memory at the start', value: megabytes(before), unit: 'MB' },
    { what: `resident memory after ${SECONDS} s`, value: megabytes(after), unit: 'MB' },
  ];
}
