import { connectAsync } from 'mqtt';
import { startBench } from './server.ts';
import type { Figure } from './figure.ts';

/** An hour of event time. */
const SECONDS = 3600;
const BLOCK = 250;
const RATE_HZ = 500;

/** End to end: publisher, embedded broker, journal, worker, as fast as acknowledgements come; one bridge of 16 channels. */
export async function benchStream(): Promise<Figure[]> {
  const bench = await startBench(1);
  try {
    const client = await connectAsync(bench.broker);
    const before = await bench.residentMegabytes();
    const blocks = (SECONDS * RATE_HZ) / BLOCK;
    const first = Date.now() * 1000 - (SECONDS + 60) * 1e6;
    const started = performance.now();
    const waiting = new Set<Promise<unknown>>();
    for (let i = 0; i < blocks; i++) {
      const payload = bench.quiet(0, first + (i * BLOCK * 1e6) / RATE_HZ, BLOCK, i);
      const sent = client.publishAsync(bench.topic(0), payload, { qos: 1 });
      waiting.add(sent);
      void sent.finally(() => waiting.delete(sent));
      if (waiting.size >= 32) await Promise.race(waiting);
    }
    await Promise.all(waiting);
    await bench.seen(0, first + (SECONDS - 1) * 1e6);
    const seconds = (performance.now() - started) / 1000;
    await client.endAsync();
    const after = await bench.residentMegabytes();
    return [
      {
        what: 'MQTT to measured, 16 channels, QoS 1, journal synced',
        value: (blocks * BLOCK * 16) / seconds / 1e6,
        unit: 'M samples/s',
      },
      { what: 'of which messages', value: blocks / seconds, unit: '1/s' },
      { what: 'resident memory of the server, at its start', value: before, unit: 'MB' },
      { what: 'resident memory of the server, after an hour of event time', value: after, unit: 'MB' },
    ];
  } finally {
    await bench.stop();
  }
}
