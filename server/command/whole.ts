import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import type { Micros } from '#core/contract/time.ts';
import { closeIntake, createIntake, takeIn, type IntakeSink } from '#core/passage/intake.ts';
import { createPipeline } from '#core/passage/pipeline.ts';

/** Samples of all channels that are measured as one event: some hours of an ordinary bridge, 400 MB. */
const LIMIT_SAMPLES = 100_000_000;

/**
 * Gathers a whole recording as one window: calibrated, put in order and freed of doubles as the pipeline does it.
 *
 * @throws SpanbeatError RECORDING_FORMAT where it is too long to be one event
 */
export async function gatherWhole(
  definition: BridgeDefinition,
  blocks: AsyncIterable<SampleBlock>,
): Promise<WindowChannel[]> {
  const tracks = new Map(
    createPipeline(definition, 1).channels.map(({ sensor, gain, shift }) => {
      const pieces: { startMicros: Micros | null; samples: Float32Array }[] = [];
      const sink: IntakeSink = {
        take: (samples, from, to, startMicros) => pieces.push({ startMicros, samples: samples.slice(from, to) }),
        note: () => undefined, // conditions of sensors are the stream's business
      };
      return [sensor.id, { sensor, gain, shift, pieces, sink, intake: createIntake(sensor.rateHz) }] as const;
    }),
  );
  let count = 0;
  for await (const block of blocks) {
    for (const { sensor, samples } of block.channels) {
      const track = tracks.get(sensor);
      if (track === undefined) continue;
      count += samples.length;
      if (count > LIMIT_SAMPLES) {
        const detail = `found more than ${LIMIT_SAMPLES} samples, expected a recording short enough to be one event`;
        throw new SpanbeatError({ code: 'RECORDING_FORMAT', where: '--whole', detail });
      }
      const calibrated = Float32Array.from(samples, (raw) => raw * track.gain + track.shift);
      takeIn(track.intake, { startMicros: block.startMicros, samples: calibrated }, track.sink);
    }
  }
  return [...tracks.values()].map(({ sensor, intake, sink, pieces }) => {
    closeIntake(intake, sink);
    return { sensor: sensor.id, rateHz: sensor.rateHz, runs: joined(pieces) };
  });
}

/** Pieces of one run put together; a piece with a start begins a run. */
function joined(pieces: readonly { startMicros: Micros | null; samples: Float32Array }[]): WindowChannel['runs'] {
  const runs: { startMicros: Micros; pieces: Float32Array[]; length: number }[] = [];
  for (const { startMicros, samples } of pieces) {
    if (startMicros !== null) runs.push({ startMicros, pieces: [], length: 0 });
    const run = runs.at(-1);
    if (run === undefined) continue;
    run.pieces.push(samples);
    run.length += samples.length;
  }
  return runs.map((run) => {
    const samples = new Float32Array(run.length);
    let at = 0;
    for (const piece of run.pieces) {
      samples.set(piece, at);
      at += piece.length;
    }
    return { startMicros: run.startMicros, samples };
  });
}
