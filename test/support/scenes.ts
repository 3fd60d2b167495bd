import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { PassageWindow, PipelineOutput } from '#core/contract/pipeline.ts';
import { MICROS_PER_SECOND, sampleMicros } from '#core/contract/time.ts';
import { createPipeline, finish, step } from '#core/passage/pipeline.ts';
import type { SimulatedChannel } from '../../simulator/simulation.ts';

/** Simulated channels as a logger would send them: one block a rate and `seconds`, in order of time. */
export function* blocksOf(
  bridge: string,
  channels: readonly SimulatedChannel[],
  seconds = 0.5,
): Generator<SampleBlock> {
  const start = Math.min(...channels.map((channel) => channel.startMicros));
  const ends = channels.map(({ startMicros, samples, rateHz }) => sampleMicros(startMicros, samples.length, rateHz));
  const stepMicros = seconds * MICROS_PER_SECOND;
  for (let from = start; from < Math.max(...ends); from += stepMicros) {
    const byRate = new Map<string, SampleBlock & { channels: SampleBlock['channels'][number][] }>();
    for (const { sensor, startMicros, rateHz, samples } of channels) {
      const at = Math.max(0, Math.ceil(((from - startMicros) * rateHz) / MICROS_PER_SECOND));
      const to = Math.min(samples.length, Math.ceil(((from + stepMicros - startMicros) * rateHz) / MICROS_PER_SECOND));
      if (to <= at) continue;
      const blockStart = sampleMicros(startMicros, at, rateHz);
      const key = `${rateHz} ${blockStart} ${to - at}`;
      const block = byRate.get(key) ?? {
        bridge,
        logger: 'L1',
        sequence: null,
        startMicros: blockStart,
        rateHz,
        channels: [],
      };
      block.channels.push({ sensor, samples: samples.slice(at, to) });
      byRate.set(key, block);
    }
    yield* byRate.values();
  }
}

/** Everything a pipeline says of a stream of blocks. */
export function runPipeline(definition: BridgeDefinition, blocks: Iterable<SampleBlock>): PipelineOutput {
  const state = createPipeline(definition, 1);
  const all: PipelineOutput = {
    levels: [],
    passages: [],
    progress: [],
    axles: [],
    spectra: [],
    health: [],
    vitals: [],
    live: [],
    settledMicros: null,
  };
  const add = (output: PipelineOutput): void => {
    all.levels.push(...output.levels);
    all.passages.push(...output.passages);
    all.progress.push(...output.progress);
    all.axles.push(...output.axles);
    all.spectra.push(...output.spectra);
    all.health.push(...output.health);
    all.vitals.push(...output.vitals);
  };
  for (const block of blocks) add(step(state, block));
  add(finish(state));
  return all;
}

/** The one passage of a scene that is meant to hold one. */
export function onlyPassage(windows: readonly PassageWindow[]): Passage {
  if (windows.length !== 1) throw new Error(`${windows.length} passages where one was expected`);
  return windows[0]!.passage;
}
