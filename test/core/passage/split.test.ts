import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { LevelEvent, PipelineOutput } from '#core/contract/pipeline.ts';
import { createPipeline, finish, step, type PipelineState } from '#core/passage/pipeline.ts';
import { closedFormBlock, closedFormBridge, cutBlock, type ClosedFormCase } from '../../support/closed-form.ts';
import { createRandom } from '../../support/random.ts';

const mode = { lengthM: 20, massPerMetreKg: 1e4, order: 1, frequencyHz: 5, zeta: 0.02 };
const CASE: ClosedFormCase = {
  mode,
  forces: [0, 2.5, 12, 14.5, 30].map((behindM) => ({ behindM, forceN: 2e5 })),
  speedMs: 37,
  rateHz: 256,
};

/** Noisy, with a gap of half a second and a stretch of NaN in one channel. */
function stream(): SampleBlock[] {
  const block = closedFormBlock(CASE, 14);
  const random = createRandom(20261201);
  for (const { samples } of block.channels)
    for (let i = 0; i < samples.length; i++) samples[i]! += 0.01 * random.normal();
  block.channels[0]!.samples.fill(NaN, 1500, 1520);
  const length = block.channels[0]!.samples.length;
  return [cutBlock(block, 0, 4200), cutBlock(block, 4328, length)];
}

interface Findings {
  passages: string;
  levels: LevelEvent[];
}

function gather(outputs: readonly PipelineOutput[]): Findings {
  const passages = outputs.flatMap((output) => output.passages);
  const levels = outputs.flatMap((output) => output.levels);
  levels.sort((a, b) => a.micros - b.micros || a.sensor.localeCompare(b.sensor) || a.value - b.value);
  // Every digit of every number, wave forms included.
  const text = JSON.stringify(passages, (_, value: unknown) => (value instanceof Float32Array ? [...value] : value));
  return { passages: text, levels };
}

function run(
  blocks: Iterable<SampleBlock>,
  between: (state: PipelineState) => PipelineState = (state) => state,
): Findings {
  let state = createPipeline(closedFormBridge(CASE), 1);
  const outputs: PipelineOutput[] = [];
  for (const block of blocks) {
    outputs.push(step(state, block));
    state = between(state);
  }
  outputs.push(finish(state));
  return gather(outputs);
}

function* split(blocks: readonly SampleBlock[], sizes: () => number): Generator<SampleBlock> {
  for (const block of blocks) {
    const length = block.channels[0]!.samples.length;
    for (let at = 0; at < length;) {
      const size = Math.min(length - at, sizes());
      yield cutBlock(block, at, at + size);
      at += size;
    }
  }
}

describe('the split of samples into blocks', () => {
  const whole = run(stream());

  it('leaves something to compare: one passage and level events', () => {
    expect(JSON.parse(whole.passages)).toHaveLength(1);
    expect(whole.levels.length).toBeGreaterThan(3);
  });

  it('does not matter when every sample comes alone', () => {
    expect(run(split(stream(), () => 1))).toEqual(whole);
  });

  it('does not matter for any sizes, empty blocks among them', () => {
    fc.assert(
      fc.property(fc.array(fc.integer({ min: 0, max: 700 }), { minLength: 3, maxLength: 12 }), (sizes) => {
        let i = 0;
        const next = (): number => sizes[i++ % sizes.length]! + (i % sizes.length === 0 ? 1 : 0);
        expect(run(split(stream(), next))).toEqual(whole);
      }),
      { numRuns: 12, seed: 7 },
    );
  });

  it('does not matter when each channel comes in messages of its own, of its own size', () => {
    const pieces = stream().flatMap((block) =>
      block.channels.flatMap((channel, c) => [...split([{ ...block, channels: [channel] }], () => 90 + 37 * c)]),
    );
    pieces.sort((a, b) => a.startMicros - b.startMicros);
    expect(run(pieces)).toEqual(whole);
  });

  it('does not matter when the state is stored and taken up again after every block', () => {
    expect(
      run(
        split(stream(), () => 333),
        (state) => structuredClone(state),
      ),
    ).toEqual(whole);
  });

  it('does not matter when blocks come twice or in the wrong order', () => {
    const blocks = [...split(stream(), () => 128)];
    const shaken = blocks.flatMap((block, i) => (i % 5 === 0 ? [block, block] : [block]));
    for (let i = 10; i + 1 < shaken.length; i += 9) {
      const [a, b] = [shaken[i]!, shaken[i + 1]!];
      shaken[i] = b;
      shaken[i + 1] = a;
    }
    expect(run(shaken)).toEqual(whole);
  });
});
