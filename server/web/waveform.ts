import { encodeFrame, type FrameChannel } from '#core/contract/frame.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import type { StoredWaveform } from './backend.ts';

/** A passage's wave form as one binary frame; a sensor with gaps has one channel entry a run. */
export function waveformFrame({ passage, channels }: StoredWaveform): Uint8Array {
  const runs = channels.flatMap(({ sensor, rateHz, runs }) => runs.map((run) => ({ sensor, rateHz, ...run })));
  const data = new Float32Array(runs.reduce((sum, { samples }) => sum + samples.length, 0));
  const entries: FrameChannel[] = [];
  let at = 0;
  for (const { sensor, rateHz, startMicros, samples } of runs) {
    data.set(samples, at);
    entries.push({ sensor, startMicros, stepMicros: MICROS_PER_SECOND / rateHz, count: samples.length, at });
    at += samples.length;
  }
  return encodeFrame({ bridge: passage.bridge, kind: 'record', layout: 'samples', channels: entries }, data);
}
