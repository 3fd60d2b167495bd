import { collectDefaultMetrics, Counter, Gauge, Registry } from 'prom-client';
import type { Backend } from './backend.ts';
import type { LiveFigures } from './live.ts';

/** Figures of this server in the Prometheus text format, read from the program when they are asked for. */
export function createMetrics(backend: Backend, live: () => LiveFigures & { viewers: number }): Registry {
  const registry = new Registry();
  const registers = [registry];
  collectDefaultMetrics({ register: registry });
  new Gauge({
    name: 'spanbeat_bridge_measuring',
    help: '1 where all channels of the bridge measure, 0.5 where some do, 0 where none does',
    labelNames: ['bridge'],
    registers,
    collect() {
      this.reset();
      for (const { id, monitoring } of backend.bridges()) {
        this.set({ bridge: id }, monitoring === 'measuring' ? 1 : monitoring === 'partly measuring' ? 0.5 : 0);
      }
    },
  });
  new Gauge({
    name: 'spanbeat_alarms_unacknowledged',
    help: 'Alarms that wait for an answer',
    labelNames: ['bridge', 'severity'],
    registers,
    collect() {
      this.reset();
      for (const { id, unacknowledged } of backend.bridges()) {
        for (const [severity, count] of Object.entries(unacknowledged)) this.set({ bridge: id, severity }, count);
      }
    },
  });
  new Counter({
    name: 'spanbeat_complaints_total',
    help: 'Complaints since the start, by code',
    labelNames: ['code'],
    registers,
    collect() {
      this.reset();
      for (const [code, count] of Object.entries(backend.systemStatus().complaints)) this.inc({ code }, count);
    },
  });
  new Gauge({
    name: 'spanbeat_journal_bytes',
    help: 'Size of the journal',
    registers,
    collect() {
      this.set(backend.systemStatus().journal.bytes);
    },
  });
  new Gauge({
    name: 'spanbeat_viewers',
    help: 'Pages that look on',
    registers,
    collect() {
      this.set(live().viewers);
    },
  });
  new Gauge({
    name: 'spanbeat_array_buffers_bytes',
    help: 'Memory of samples, messages and columns that the main thread holds',
    registers,
    collect() {
      this.set(process.memoryUsage().arrayBuffers);
    },
  });
  new Gauge({
    name: 'spanbeat_workers_heap_bytes',
    help: 'Heaps that the worker threads of the pipelines have taken',
    registers,
    async collect() {
      this.set(await backend.workersHeapBytes());
    },
  });
  new Gauge({
    name: 'spanbeat_stage_seconds',
    help: 'How long blocks took on each stretch of their way since the start; quantile 1 is the longest',
    labelNames: ['stage', 'quantile'],
    registers,
    collect() {
      this.reset();
      for (const { stage, count, p50Ms, p99Ms, longestMs } of backend.durations()) {
        if (count === 0) continue;
        this.set({ stage, quantile: '0.5' }, p50Ms / 1000);
        this.set({ stage, quantile: '0.99' }, p99Ms / 1000);
        this.set({ stage, quantile: '1' }, longestMs / 1000);
      }
    },
  });
  const counters = [
    ['spanbeat_frames_sent_total', 'Live frames sent', 'framesSent'],
    ['spanbeat_frames_skipped_total', 'Live frames that slow viewers missed', 'framesSkipped'],
    ['spanbeat_viewers_dropped_total', 'Viewers dropped for being slow', 'viewersDropped'],
  ] as const;
  for (const [name, help, field] of counters) {
    new Counter({
      name,
      help,
      registers,
      collect() {
        this.reset();
        this.inc(live()[field]);
      },
    });
  }
  return registry;
}
