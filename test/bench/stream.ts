import { connectAsync, type MqttClient } from 'mqtt';
import type { Figure } from './figure.ts';
import { startBench, type BenchServer, type Metrics } from './server.ts';
import { benchLoop, CHANNELS, LOOP_SECONDS, RATE_HZ } from './traffic.ts';

const BRIDGES = 10;
/** An hour of event time, memory told every ten minutes of it. */
const SECONDS = 3600;
const TOLD_EVERY_SECONDS = 600;
const BLOCK = 250;
const BLOCKS_A_LOOP = (LOOP_SECONDS * RATE_HZ) / BLOCK;
/** Of so many loops one has a train: 36 an hour on each bridge, three times the densest line. */
const LOOPS_A_TRAIN = 4;
/** Messages that one logger sends before it waits for an acknowledgement. */
const IN_FLIGHT = 4;

/**
 * End to end as fast as acknowledgements come: a publisher a bridge, embedded broker, journal, worker, history; ten
 * bridges. The stream is some hundred times as fast as a real one: what is held only while it is worked on shows here.
 */
export async function benchStream(): Promise<Figure[]> {
  const bench = await startBench(BRIDGES);
  try {
    const clients = await Promise.all(Array.from({ length: BRIDGES }, () => connectAsync(bench.broker)));
    const first = Date.now() * 1000 - (SECONDS + 60) * 1e6;
    const memory = [memoryOf('at the start', await bench.metrics())];
    const loops = [benchLoop(true, 3), benchLoop(false, 4)] as const;
    const started = performance.now();
    for (let second = 0; second < SECONDS; second += TOLD_EVERY_SECONDS) {
      const end = second + TOLD_EVERY_SECONDS;
      await Promise.all(clients.map((client, b) => publish(bench, client, b, loops, first, second, end)));
      for (const b of clients.keys()) await bench.seen(b, first + (end - 1) * 1e6);
      memory.push(memoryOf(`after ${end / 60} min`, await bench.metrics()));
    }
    const seconds = (performance.now() - started) / 1000;
    await Promise.all(clients.map((client) => client.endAsync()));
    const messages = (BRIDGES * SECONDS * RATE_HZ) / BLOCK;
    return [
      {
        what: `MQTT to measured, ${BRIDGES} bridges x ${CHANNELS} channels, QoS 1, journal synced`,
        value: (messages * BLOCK * CHANNELS) / seconds / 1e6,
        unit: 'M samples/s',
      },
      { what: 'of which messages', value: messages / seconds, unit: '1/s' },
      { what: 'event time over real time', value: SECONDS / seconds, unit: 'times' },
      ...memory.flat(),
    ];
  } finally {
    await bench.stop();
  }
}

async function publish(
  bench: BenchServer,
  client: MqttClient,
  bridge: number,
  [train, quiet]: readonly [ReturnType<typeof benchLoop>, ReturnType<typeof benchLoop>],
  first: number,
  fromSecond: number,
  toSecond: number,
): Promise<void> {
  const waiting = new Set<Promise<unknown>>();
  for (let i = (fromSecond * RATE_HZ) / BLOCK; i < (toSecond * RATE_HZ) / BLOCK; i++) {
    const loop = (Math.floor(i / BLOCKS_A_LOOP) + bridge) % LOOPS_A_TRAIN === 0 ? train : quiet;
    const payload = loop.payload(i, BLOCK, first + (i * BLOCK * 1e6) / RATE_HZ);
    const sent = client.publishAsync(bench.topic(bridge), payload, { qos: 1 });
    waiting.add(sent);
    void sent.finally(() => waiting.delete(sent));
    if (waiting.size >= IN_FLIGHT) await Promise.race(waiting);
  }
  await Promise.all(waiting);
}

function memoryOf(when: string, metrics: Metrics): Figure[] {
  const megabytes = (name: string): number => (metrics.get(name) ?? NaN) / 1e6;
  return [
    { what: `memory of the server ${when}: resident`, value: megabytes('process_resident_memory_bytes'), unit: 'MB' },
    { what: '  heap of the main thread, used', value: megabytes('nodejs_heap_size_used_bytes'), unit: 'MB' },
    { what: '  heap of the main thread, taken', value: megabytes('nodejs_heap_size_total_bytes'), unit: 'MB' },
    { what: '  beside it', value: megabytes('nodejs_external_memory_bytes'), unit: 'MB' },
    { what: '  of which array buffers', value: megabytes('spanbeat_array_buffers_bytes'), unit: 'MB' },
    { what: '  heaps of the workers, taken', value: megabytes('spanbeat_workers_heap_bytes'), unit: 'MB' },
  ];
}
