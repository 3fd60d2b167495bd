import { deserialize, serialize } from 'node:v8';
import { parentPort } from 'node:worker_threads';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { createPipeline, step, type PipelineState } from '#core/passage/pipeline.ts';
import { sharedMs } from './stages.ts';

/** To a worker. Messages are done in their order. */
export type ToWorker =
  | { kind: 'open'; bridge: string; definition: BridgeDefinition; version: number; state: Uint8Array | null }
  | { kind: 'block'; block: SampleBlock }
  | { kind: 'snapshot'; bridge: string; token: number };

/** From a worker. */
export type FromWorker =
  | { kind: 'outputs'; outputs: BridgeOutput[] }
  | { kind: 'snapshot'; bridge: string; token: number; state: Uint8Array; quiet: boolean }
  /** The pipeline of this bridge threw and takes no more blocks until it is opened again. */
  | { kind: 'fault'; bridge: string; detail: string };

/** What came of `blocks` blocks of one bridge. */
export interface BridgeOutput {
  bridge: string;
  blocks: number;
  /** No record is yet to come of what they hold. */
  quiet: boolean;
  output: PipelineOutput;
  /** When the block had its turn, and when it was done; see `sharedMs`. */
  begunMs: number;
  doneMs: number;
}

/** Runs the pipelines of its bridges in a thread of its own: pure computing, no files, no sockets. */
function run(port: NonNullable<typeof parentPort>): void {
  const pipelines = new Map<string, PipelineState>();
  let held: BridgeOutput[] = [];
  let waiting = false;

  const send = (): void => {
    waiting = false;
    if (held.length === 0) return;
    const outputs = held;
    held = [];
    port.postMessage({ kind: 'outputs', outputs } satisfies FromWorker, buffersOf(outputs));
  };
  /** What people wait for goes out at once, the rest with its neighbours. */
  const hold = (output: BridgeOutput): void => {
    held.push(output);
    if (isUrgent(output.output) || held.length >= 64) {
      send();
      return;
    }
    if (!waiting) setImmediate(send);
    waiting = true;
  };
  const fault = (bridge: string, failure: unknown): void => {
    pipelines.delete(bridge);
    send();
    const detail = failure instanceof Error ? (failure.stack ?? failure.message) : String(failure);
    port.postMessage({ kind: 'fault', bridge, detail } satisfies FromWorker);
  };
  const open = ({ bridge, definition, version, state }: Extract<ToWorker, { kind: 'open' }>): void => {
    try {
      const pipeline = state === null ? createPipeline(definition, version) : (deserialize(state) as PipelineState);
      pipelines.set(bridge, pipeline);
    } catch (failure) {
      fault(bridge, failure);
    }
  };
  const take = (block: SampleBlock): void => {
    const state = pipelines.get(block.bridge);
    if (state === undefined) return;
    try {
      const begunMs = sharedMs();
      const output = step(state, block);
      hold({ bridge: block.bridge, blocks: 1, quiet: isQuiet(state), output, begunMs, doneMs: sharedMs() });
    } catch (failure) {
      fault(block.bridge, failure);
    }
  };

  port.on('message', (message: ToWorker) => {
    switch (message.kind) {
      case 'open':
        open(message);
        return;
      case 'block': {
        take(message.block);
        return;
      }
      case 'snapshot': {
        const state = pipelines.get(message.bridge);
        if (state === undefined) return;
        send();
        const bytes = Uint8Array.from(serialize(state));
        const { bridge, token } = message;
        port.postMessage(
          { kind: 'snapshot', bridge, token, state: bytes, quiet: isQuiet(state) } satisfies FromWorker,
          [bytes.buffer],
        );
      }
    }
  });
}

/** Nothing is under way whose record is yet to come: neither on the bridge nor ringing on. */
function isQuiet({ detector, exceedance }: PipelineState): boolean {
  return detector.open === null && detector.ringing === null && exceedance.open === null;
}

function isUrgent({ levels, passages, progress, axles }: PipelineOutput): boolean {
  return levels.length + passages.length + progress.length + axles.length > 0;
}

/** Memory that changes hands instead of being copied. */
function buffersOf(outputs: readonly BridgeOutput[]): ArrayBuffer[] {
  const buffers = new Set<ArrayBufferLike>();
  for (const { output } of outputs) {
    for (const { samples } of output.live) buffers.add(samples.buffer);
    for (const { psd } of output.spectra) buffers.add(psd.buffer);
    for (const { channels } of output.passages) {
      for (const { runs } of channels) for (const { samples } of runs) buffers.add(samples.buffer);
    }
  }
  return [...buffers] as ArrayBuffer[];
}

if (parentPort !== null) run(parentPort);
