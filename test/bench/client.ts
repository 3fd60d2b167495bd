import { setTimeout as sleep } from 'node:timers/promises';
import { connectAsync } from 'mqtt';
import type { CDPSession } from 'playwright-core';
import { openBrowser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { quantile, type Figure } from './figure.ts';
import { startBench, type BenchServer } from './server.ts';
import { benchBridge, benchLoop, LOOP_SECONDS, RATE_HZ } from './traffic.ts';

const BLOCK = 50;
const WARM_SECONDS = 10;

/** Work of the page's main thread for each frame of the screen, all sixteen channels of 500 Hz live, a train among it. */
export async function benchClient(): Promise<Figure[]> {
  if (!available('chromium')) return [{ what: 'Chromium is not on this machine', value: NaN, unit: '' }];
  const bench = await startBench(1);
  try {
    const ending = new AbortController();
    const publishing = publish(bench, ending.signal);
    const channels = benchBridge().sensors.map(({ id }) => id);
    const browser = await openBrowser();
    try {
      await browser.page.goto(`${bench.url}/live/b0?channels=${channels.join(',')}`);
      await browser.page.getByText('Measuring', { exact: true }).waitFor();
      await sleep(WARM_SECONDS * 1000);
      const session = await browser.context.newCDPSession(browser.page);
      const frames = await tracedFrames(session, LOOP_SECONDS * 1000);
      return figures(frames, channels.length);
    } finally {
      await browser.close();
      ending.abort();
      await publishing;
    }
  } finally {
    await bench.stop();
  }
}

async function publish(bench: BenchServer, signal: AbortSignal): Promise<void> {
  const client = await connectAsync(bench.broker);
  const loop = benchLoop(true, 3);
  const first = Date.now() * 1000;
  const started = performance.now();
  for (let i = 0; !signal.aborted; i++) {
    await sleep(Math.max(0, started + ((i + 1) * BLOCK * 1000) / RATE_HZ - performance.now()));
    const payload = loop.payload(i, BLOCK, first + Math.round((i * BLOCK * 1e6) / RATE_HZ));
    void client.publishAsync(bench.topic(0), payload, { qos: 1 }).catch(() => undefined);
  }
  await client.endAsync();
}

interface Frame {
  /** Of all tasks of the main thread from this frame to the next, and of its scripts alone: time of the processor, ms. */
  workMs: number;
  scriptMs: number;
}

interface TraceEvent {
  name: string;
  ph: string;
  ts: number;
  dur?: number;
  /** What of it the thread really ran: what other programs of the machine took is not in it. */
  tdur?: number;
  pid: number;
  tid: number;
  args?: { name?: string };
}

const CATEGORIES = ['devtools.timeline', 'disabled-by-default-devtools.timeline', '__metadata'];

async function tracedFrames(session: CDPSession, forMs: number): Promise<Frame[]> {
  const events: TraceEvent[] = [];
  session.on('Tracing.dataCollected', ({ value }) => events.push(...(value as unknown as TraceEvent[])));
  const complete = new Promise<void>((resolve) => session.once('Tracing.tracingComplete', () => resolve()));
  await session.send('Tracing.start', {
    transferMode: 'ReportEvents',
    traceConfig: { includedCategories: CATEGORIES, excludedCategories: ['*'] },
  });
  await sleep(forMs);
  await session.send('Tracing.end');
  await complete;
  return framesOf(events);
}

/** What the main thread of the page did from one firing of animation frames to the next: all tasks, samples taken in too. */
function framesOf(events: readonly TraceEvent[]): Frame[] {
  const threads = new Map<string, TraceEvent[]>();
  const own = new Set(
    events
      .filter(({ name, args }) => name === 'thread_name' && args?.name === 'CrRendererMain')
      .map(({ pid, tid }) => `${pid} ${tid}`),
  );
  for (const event of events) {
    const key = `${event.pid} ${event.tid}`;
    if (!own.has(key)) continue;
    const list = threads.get(key) ?? [];
    threads.set(key, list);
    list.push(event);
  }
  // Chromium keeps a spare renderer; the page's is the one that makes frames.
  const busiest = [...threads.values()].sort((a, b) => begins(b).length - begins(a).length)[0] ?? [];
  // The task in which a frame fires begins a little before it.
  const tasks = busiest.filter(({ name, ph }) => ph === 'X' && name === 'RunTask').sort((a, b) => a.ts - b.ts);
  const starts = [...new Set(begins(busiest).map((at) => tasks.findLast(({ ts }) => ts <= at)?.ts ?? at))];
  const script = busiest
    .filter(({ name, ph }) => ph === 'X' && (name === 'FunctionCall' || name === 'EvaluateScript'))
    .sort((a, b) => a.ts - b.ts);
  return starts.slice(0, -1).map((start, i) => ({
    workMs: within(tasks, start, starts[i + 1]!),
    scriptMs: within(script, start, starts[i + 1]!),
  }));
}

const begins = (events: readonly TraceEvent[]): number[] =>
  events
    .filter(({ name }) => name === 'FireAnimationFrame')
    .map(({ ts }) => ts)
    .sort((a, b) => a - b);

/** Events of one kind may be nested: only the outermost count, for the frame in which they begin. */
function within(events: readonly TraceEvent[], from: number, to: number): number {
  let sum = 0;
  let end = -Infinity;
  for (const { ts, dur = 0, tdur = dur } of events) {
    if (ts < from || ts >= to || ts < end) continue;
    end = ts + dur;
    sum += tdur;
  }
  return sum / 1000;
}

function figures(frames: readonly Frame[], channels: number): Figure[] {
  const work = frames.map(({ workMs }) => workMs);
  const script = frames.map(({ scriptMs }) => scriptMs);
  const what = `main thread for a frame, ${channels} channels of ${RATE_HZ} Hz live`;
  return [
    { what: 'frames', value: frames.length / LOOP_SECONDS, unit: '1/s' },
    { what: `${what}, p50`, value: quantile(work, 0.5), unit: 'ms' },
    { what: `${what}, p95`, value: quantile(work, 0.95), unit: 'ms', aim: '<= 4' },
    { what: `${what}, longest`, value: quantile(work, 1), unit: 'ms' },
    { what: 'of which scripts, p50', value: quantile(script, 0.5), unit: 'ms' },
    { what: 'of which scripts, p95', value: quantile(script, 0.95), unit: 'ms' },
  ];
}
