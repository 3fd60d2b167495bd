import { setTimeout as sleep } from 'node:timers/promises';
import { parentPort, workerData } from 'node:worker_threads';
import type { Alarm } from '#core/contract/alarm.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { PassageWindow, PipelineOutput } from '#core/contract/pipeline.ts';
import type { Micros } from '#core/contract/time.ts';
import { eventsOf, next, nextAll, openDesk } from '#core/alarm/desk.ts';
import { createPipeline, finish, step } from '#core/passage/pipeline.ts';
import { pastPassages, type PastPassage } from '../simulator/demonstration.ts';

/** What the thread that makes the measured past is given. */
export interface PastWork {
  definitions: readonly BridgeDefinition[];
  /** Of each definition, as the history numbers it. */
  versions: readonly number[];
  seed: number;
  days: number;
  nowMicros: Micros;
  /** Passages that were made before. */
  skip: number;
}

export type FromPast = { kind: 'passage'; found: { window: PassageWindow; alarms: Alarm[] }[] } | { kind: 'finished' };

/** Passages of the days before, simulated as samples and measured by the same pipeline. Ends on any message. */
async function run(port: NonNullable<typeof parentPort>, work: PastWork): Promise<void> {
  const ending = new AbortController();
  port.once('message', () => {
    ending.abort();
    port.close();
  });
  let number = 0;
  for (const past of pastPassages(work)) {
    if (number++ < work.skip) continue;
    const startedMs = performance.now();
    port.postMessage({ kind: 'passage', found: measured(past, work) } satisfies FromPast);
    // Half of one core at most: the present comes first.
    await sleep(performance.now() - startedMs);
    if (ending.signal.aborted) return;
  }
  port.postMessage({ kind: 'finished' } satisfies FromPast);
}

function measured({ definition, blocks }: PastPassage, work: PastWork): { window: PassageWindow; alarms: Alarm[] }[] {
  const version = work.versions[work.definitions.findIndex(({ id }) => id === definition.id)] ?? 1;
  const pipeline = createPipeline(definition, version);
  const outputs: PipelineOutput[] = [...blocks.map((block) => step(pipeline, block)), finish(pipeline)];
  const nowMicros = blocks.at(-1)?.startMicros ?? work.nowMicros;
  let desk = openDesk({ definition, nowMicros });
  for (const output of outputs) desk = nextAll(desk, eventsOf(definition.id, output), nowMicros).state;
  return outputs
    .flatMap(({ passages }) => passages)
    .map((window) => ({
      window,
      alarms: Object.values(desk.alarms)
        .filter(({ passage }) => passage === window.passage.id)
        .map((alarm) => answered(desk, alarm, nowMicros)),
    }));
}

/** In the invented past somebody was on duty. */
function answered(desk: Parameters<typeof next>[0], { id }: Alarm, nowMicros: Micros): Alarm {
  const note = 'Answered in the invented past.';
  const event = { kind: 'acknowledge' as const, alarm: id, by: 'the demonstration', note };
  return next(desk, event, nowMicros + 60_000_000).state.alarms[id]!;
}

if (parentPort !== null) await run(parentPort, workerData as PastWork);
