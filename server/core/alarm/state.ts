import type { Alarm } from '../contract/alarm.ts';
import type { BridgeDefinition } from '../contract/bridge.ts';
import type { Complaint } from '../contract/errors.ts';
import type { SensorCondition } from '../contract/health.ts';
import type { Passage } from '../contract/passage.ts';
import type { LevelEvent, PassageProgress } from '../contract/pipeline.ts';
import type { Micros } from '../contract/time.ts';

/** What the alarm desk of one bridge knows. Plain data: it can be cloned, compared and built anew from stored alarms. */
export interface DeskState {
  readonly definition: BridgeDefinition;
  /** Open alarms, and the newest closed ones so that a replay joins them instead of raising them again. */
  readonly alarms: Readonly<Record<string, Alarm>>;
  /** Of each alarm in excursion: sensor → null while above, else when it came back. */
  readonly excursions: Readonly<Record<string, Readonly<Record<string, Micros | null>>>>;
  /** The passage on the bridge or in its free decay. */
  readonly passage: CurrentPassage | null;
  /** Windows of the newest records; samples of theirs may yet come, too late for them. */
  readonly records: readonly RecordWindow[];
  /** Whole second of event time before which no passage is yet to come; -1 before any. */
  readonly settledSecond: number;
  /** The first such second since the pipeline was opened. */
  readonly openedSecond: number;
  /** Passages above a limit by the record, of the newest day. */
  readonly above: readonly PassageAbove[];
  /** By sensor. */
  readonly conditions: Readonly<Record<string, readonly SensorCondition[]>>;
  /** By logger; a logger that was never heard is not in it. */
  readonly loggers: Readonly<Record<string, LoggerHeard>>;
  /** Logger → id of the alarm of its silence, while that lasts. */
  readonly silences: Readonly<Record<string, string>>;
}

interface CurrentPassage {
  readonly id: string;
  readonly onMicros: Micros;
  readonly leftMicros: Micros | null;
}

export interface RecordWindow {
  readonly passage: string;
  readonly startMicros: Micros;
  readonly endMicros: Micros;
}

export interface PassageAbove {
  readonly limit: string;
  readonly passage: string;
  readonly micros: Micros;
}

interface LoggerHeard {
  /** Event time of its newest sample. */
  readonly newestMicros: Micros;
  /** Wall clock when it was last heard. */
  readonly heardMicros: Micros;
}

/** What may happen at the desk. */
export type DeskEvent =
  | { kind: 'level'; level: LevelEvent }
  | { kind: 'progress'; progress: PassageProgress }
  /** The record of a finished passage. */
  | { kind: 'passage'; passage: Passage }
  /** No passage that is yet to come reaches back before this time. */
  | { kind: 'settled'; bridge: string; micros: Micros }
  | { kind: 'condition'; condition: SensorCondition }
  /** A block of a logger was taken: event times of its first and one past its last sample. */
  | { kind: 'heard'; logger: string; fromMicros: Micros; toMicros: Micros }
  /** The wall clock went on; once a second is enough. */
  | { kind: 'tick' }
  | { kind: 'acknowledge'; alarm: string; by: string; note: string }
  /** An alarm was handed to the broker and taken by it. */
  | { kind: 'published'; alarm: string }
  /** An alarm that only the store still holds, so that it can be acknowledged. */
  | { kind: 'recall'; alarm: Alarm }
  | { kind: 'definition'; definition: BridgeDefinition };

/** A span of event time in which a logger sent nothing; `toMicros` is null while it lasts. */
export interface NoData {
  bridge: string;
  logger: string;
  fromMicros: Micros;
  toMicros: Micros | null;
}

/** What the shell is asked to do. */
export type DeskEffect =
  /** Store it, push it to viewers and, where `publish`, send it out. */
  | { kind: 'alarm'; alarm: Alarm; publish: boolean }
  | { kind: 'no data'; noData: NoData }
  | { kind: 'refused'; complaint: Complaint };

/** The outcome of one event: the state after it, and effects other than changed alarms. */
export interface DeskStep {
  state: DeskState;
  effects: DeskEffect[];
}

/** Closed alarms that the desk remembers; older ones are in the store only. */
export const REMEMBERED_CLOSED = 500;
/** Open alarms that the desk holds; beyond, the oldest that are back to normal are in the store only (see `recall`). */
const HELD_OPEN = 2000;

/** Records whose windows the desk remembers. */
export const REMEMBERED_RECORDS = 32;

/** The state with one alarm put in; the same state where nothing changed. */
export function withAlarm(state: DeskState, alarm: Alarm): DeskState {
  if (state.alarms[alarm.id] === alarm) return state;
  return { ...state, alarms: { ...state.alarms, [alarm.id]: alarm } };
}

/** Drops what is beyond the limits above, oldest first. Alarms still in excursion are never dropped. */
export function trimmed(state: DeskState): DeskState {
  const all = Object.values(state.alarms);
  if (all.length <= REMEMBERED_CLOSED) return state;
  const oldestFirst = all.toSorted((a, b) => a.raisedMicros - b.raisedMicros || (a.id < b.id ? -1 : 1));
  const closed = oldestFirst.filter((alarm) => alarm.state === 'normal');
  const waiting = oldestFirst.filter((alarm) => alarm.state === 'returned to normal, unacknowledged');
  const dropped = new Set([
    ...closed.slice(0, Math.max(0, closed.length - REMEMBERED_CLOSED)),
    ...waiting.slice(0, Math.max(0, all.length - closed.length - HELD_OPEN)),
  ]);
  if (dropped.size === 0) return state;
  const kept = oldestFirst.filter((alarm) => !dropped.has(alarm));
  return {
    ...state,
    alarms: Object.fromEntries(kept.map((alarm) => [alarm.id, alarm])),
    excursions: Object.fromEntries(
      kept.flatMap(({ id }) => (state.excursions[id] === undefined ? [] : [[id, state.excursions[id]]])),
    ),
  };
}
