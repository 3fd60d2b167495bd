import type { Micros } from './time.ts';

/**
 * A block of evenly spaced samples as it enters the pipeline: decoded and named, not yet calibrated.
 * All channels of a block share start, rate and length.
 */
export interface SampleBlock {
  bridge: string;
  logger: string;
  /** The logger's own count of its blocks, where it keeps one. */
  sequence: number | null;
  /** Time of the first sample. */
  startMicros: Micros;
  rateHz: number;
  channels: readonly ChannelSamples[];
}

export interface ChannelSamples {
  /** Sensor id of the bridge definition. */
  sensor: string;
  /** In the sensor's unit, before its scale and offset. */
  samples: Float64Array;
}

/** Limits of one block; a larger one is refused whole. */
export const BLOCK_LIMITS = { channels: 256, samplesPerChannel: 400_000, bytes: 16 * 1024 * 1024 } as const;
