import type { Passage } from './passage.ts';
import type { Severity } from './severity.ts';
import type { SensorCondition } from './health.ts';
import type { Micros } from './time.ts';

/** What the pipeline says as samples go in. All times are event times. */
export interface PipelineOutput {
  levels: LevelEvent[];
  passages: PassageWindow[];
  /** Progress of the passage now on the bridge. */
  progress: PassageProgress[];
  axles: AxleEvent[];
  spectra: SpectrumLine[];
  health: SensorCondition[];
  /** Once a minute of event time for each sensor that gave data in it. */
  vitals: SensorVitals[];
  live: LiveSamples[];
  /** No passage that is yet to come will reach back before this time; null while nothing was looked at. */
  settledMicros: Micros | null;
}

/** The causal, band-limited signal of one channel passed a limit upwards; or came back below all for a while. */
export interface LevelEvent {
  bridge: string;
  sensor: string;
  limit: string;
  kind: 'passed' | 'returned';
  /** The gravest level passed so far in this excursion. */
  severity: Severity;
  /**
   * When this level was first passed, or when quiet was declared, by the time of the filtered sample: the causal filter
   * delays the bridge's motion by about 0.42 / (band edge), 9 ms at 45 Hz.
   */
  micros: Micros;
  /** Magnitude at that sample or crest, m/s². */
  value: number;
}

/** A finished passage with the samples it was computed from. */
export interface PassageWindow {
  passage: Passage;
  channels: WindowChannel[];
}

/** Calibrated samples of one sensor in a passage's window; a gap starts a new run. */
export interface WindowChannel {
  sensor: string;
  rateHz: number;
  runs: { startMicros: Micros; samples: Float32Array }[];
}

export interface PassageProgress {
  bridge: string;
  /** The id that the passage will carry. */
  passage: string;
  kind: 'entered' | 'left' | 'discarded';
  micros: Micros;
}

/** One axle seen by one axle sensor, live. Speed is known once a second sensor has seen the train. */
export interface AxleEvent {
  bridge: string;
  passage: string | null;
  sensor: string;
  micros: Micros;
  alongM: number;
  /** Signed: positive towards rising chainage. */
  speedMs: number | null;
}

/** One line of the rolling spectrum: a minute of one deck channel. */
export interface SpectrumLine {
  bridge: string;
  sensor: string;
  /** End of the minute. */
  micros: Micros;
  stepHz: number;
  /** One-sided power spectral density, (m/s²)²/Hz, from 0 Hz. */
  psd: Float32Array;
}

/** Calibrated samples for the screen: accelerations in the live band, other quantities as they are. */
export interface LiveSamples {
  bridge: string;
  sensor: string;
  startMicros: Micros;
  rateHz: number;
  samples: Float32Array;
}

/** Noise (r.m.s. of the quiet seconds) and offset of one sensor in the last full minute, in SI. */
export interface SensorVitals {
  bridge: string;
  sensor: string;
  micros: Micros;
  samples: number;
  noise: number | null;
  offset: number | null;
}
