import type { Alarm } from '#core/contract/alarm.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type {
  Acknowledgement,
  AlarmQuery,
  BridgeView,
  Day,
  DayQuery,
  ErrorRow,
  PassagePage,
  PassageQuery,
  PassageView,
  Recomputed,
  SpectraView,
} from '#core/contract/api.ts';
import type { Result } from '#core/contract/errors.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import type { BridgeStatus, SystemStatus } from '#core/contract/status.ts';
import type { Micros } from '#core/contract/time.ts';
import type { Principal } from './principal.ts';

/** What the HTTP interface and the live push ask of the rest of the program. Null stands for "there is none". */
export interface Backend {
  systemStatus(): SystemStatus;
  bridges(): BridgeStatus[];
  bridge(id: string): BridgeView | null;
  /** YAML as it was given; the newest where no version is named. */
  definitionText(bridge: string, version?: number): string | null;
  /** The first deck sensor where none is named. */
  spectra(bridge: string, sensor?: string): SpectraView | null;

  passages(query: PassageQuery): Promise<PassagePage>;
  days(query: DayQuery): Promise<Result<Day[]>>;
  passage(id: string): Promise<PassageView | null>;
  waveform(id: string): Promise<StoredWaveform | null>;
  /** Path of the archive's file. */
  waveformFile(id: string): Promise<string | null>;
  recomputed(id: string): Promise<Result<Recomputed>>;

  /** Every alarm that waits for an answer or lasts, from memory. */
  openAlarms(): Alarm[];
  alarms(query: AlarmQuery): Promise<Alarm[]>;
  alarm(id: string): Promise<Alarm | null>;
  acknowledge(id: string, answer: Acknowledgement, principal: Principal): Promise<Result<Alarm>>;

  errors(): ErrorRow[];
  /** How long blocks took on each stretch of their way since the start; not a number where none came. */
  durations(): StageDuration[];
  /** What the worker threads have taken for their heaps. */
  workersHeapBytes(): Promise<number>;
  /** Wall clock. */
  nowMicros(): Micros;
}

export interface StageDuration {
  stage: string;
  count: number;
  p50Ms: number;
  p99Ms: number;
  longestMs: number;
}

export interface StoredWaveform {
  passage: Passage;
  /** In force when the passage crossed; for the units. */
  definition: BridgeDefinition;
  channels: readonly WindowChannel[];
}
