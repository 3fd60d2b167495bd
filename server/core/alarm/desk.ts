import type { Alarm } from '../contract/alarm.ts';
import type { BridgeDefinition } from '../contract/bridge.ts';
import type { PipelineOutput } from '../contract/pipeline.ts';
import type { Micros } from '../contract/time.ts';
import { onCondition } from './condition.ts';
import { onLevel, onProgress } from './level.ts';
import { acknowledge, isActive, mayAcknowledge, published } from './life.ts';
import { onPassage } from './record.ts';
import { onSettled } from './settled.ts';
import { onHeard, onTick } from './silence.ts';
import {
  trimmed,
  withAlarm,
  type DeskEffect,
  type DeskEvent,
  type DeskState,
  type DeskStep,
  type PassageAbove,
} from './state.ts';

/** What a desk is built from at the start of a run: all of it comes out of the store or the journal. */
export interface DeskStart {
  definition: BridgeDefinition;
  /** Open alarms of the bridge and its newest closed ones, in any order. */
  alarms?: readonly Alarm[];
  /** Passages above a limit in the newest day, by the record. */
  above?: readonly PassageAbove[];
  /** Newest sample of each logger that was heard in an earlier run, so that its silence is noticed in this one. */
  newest?: Readonly<Record<string, Micros>>;
  /** Wall clock. */
  nowMicros: Micros;
}

/**
 * The alarm desk of one bridge at the start of a run.
 *
 * Excursions that lasted when the server stopped go on: the replay of the journal or the coming samples end them.
 *
 * @param start the definition in force and what the store remembers
 * @returns plain data; hand it to `next` with each event
 * @example openDesk({ definition, nowMicros: 0 }).passage // null
 */
export function openDesk({ definition, alarms = [], above = [], newest = {}, nowMicros }: DeskStart): DeskState {
  return trimmed({
    definition,
    alarms: Object.fromEntries(alarms.map((alarm) => [alarm.id, alarm])),
    excursions: Object.fromEntries(
      alarms
        .filter((alarm) => alarm.kind === 'level' && isActive(alarm))
        .map((alarm) => [alarm.id, Object.fromEntries(alarm.sensors.map((sensor) => [sensor, null]))]),
    ),
    passage: null,
    records: [],
    settledSecond: -1,
    openedSecond: -1,
    above,
    conditions: {},
    loggers: Object.fromEntries(
      Object.entries(newest).map(([logger, newestMicros]) => [logger, { newestMicros, heardMicros: nowMicros }]),
    ),
    silences: Object.fromEntries(
      alarms.filter((alarm) => alarm.kind === 'no data' && isActive(alarm)).map(({ rule, id }) => [rule, id]),
    ),
  });
}

/**
 * One event at the desk: the state after it and what the shell is to do.
 *
 * Level alarms: one a passage and limit, joined by every channel that passes while the passage lasts (where no passage is
 * known, while the excursion lasts), escalating AL → IL → IAL; the states are tabled in `life.ts`. `liveValue` and `sensor`
 * are the largest so far. The record of the passage confirms or corrects it; a record above a limit without a
 * live alarm raises one. Where no train was recognised until none can be any more, the alarm says so, and the live value
 * stands. Events that were seen before change nothing, so a replay of any part of the stream is harmless.
 *
 * At the limits: an alarm keeps 200 steps (`withStep` says which go), the desk 500 closed and 2000 open alarms; older ones
 * are in the store and can be brought back by `recall`.
 *
 * @param state of this bridge; events of another bridge are refused by assertion
 * @param event what happened
 * @param nowMicros wall clock, for `takenMicros`, acknowledgements and silence
 * @returns the state and the effects in the order in which they are to be done: every changed alarm once
 * @throws Error where the event belongs to another bridge: the caller mixed up desks
 * @example next(desk, { kind: 'tick' }, 0).effects // []
 */
export function next(state: DeskState, event: DeskEvent, nowMicros: Micros): DeskStep {
  const bridge = bridgeOf(event);
  if (bridge !== null && bridge !== state.definition.id) {
    throw new Error(`event of bridge ${bridge} at the desk of ${state.definition.id}`);
  }
  const step = reaction(state, event, nowMicros);
  const publish = event.kind !== 'published' && event.kind !== 'recall';
  return { state: step.state, effects: [...step.effects, ...changed(state, step.state, publish)] };
}

/** Runs events one after the other; the effects of all. */
export function nextAll(state: DeskState, events: readonly DeskEvent[], nowMicros: Micros): DeskStep {
  let now = state;
  const effects: DeskEffect[] = [];
  for (const event of events) {
    const step = next(now, event, nowMicros);
    now = step.state;
    effects.push(...step.effects);
  }
  return { state: now, effects };
}

/**
 * What one step of the pipeline said, as events for the desk, in the order of event time; then records of passages, then
 * how far all passages are known.
 *
 * However the samples were split into blocks, the alarms are the same in the end, but for the order in which steps were
 * taken.
 */
export function eventsOf(
  bridge: string,
  output: Pick<PipelineOutput, 'levels' | 'progress' | 'health' | 'passages' | 'settledMicros'>,
): DeskEvent[] {
  const { passages, settledMicros } = output;
  const timed: [Micros, DeskEvent][] = [
    ...output.progress.map((progress): [Micros, DeskEvent] => [progress.micros, { kind: 'progress', progress }]),
    ...output.health.map((condition): [Micros, DeskEvent] => [condition.micros, { kind: 'condition', condition }]),
    ...output.levels.map((level): [Micros, DeskEvent] => [level.micros, { kind: 'level', level }]),
  ];
  const inTime = timed.toSorted((a, b) => a[0] - b[0]).map(([, event]) => event);
  return [
    ...inTime,
    ...passages.map(({ passage }): DeskEvent => ({ kind: 'passage', passage })),
    ...(settledMicros === null ? [] : [{ kind: 'settled' as const, bridge, micros: settledMicros }]),
  ];
}

function reaction(state: DeskState, event: DeskEvent, nowMicros: Micros): DeskStep {
  switch (event.kind) {
    case 'level':
      return quiet(onLevel(state, event.level, nowMicros));
    case 'progress':
      return quiet(onProgress(state, event.progress, nowMicros));
    case 'passage':
      return quiet(onPassage(state, event.passage, nowMicros));
    case 'settled':
      return quiet(onSettled(state, event.micros, nowMicros));
    case 'condition':
      return quiet(onCondition(state, event.condition, nowMicros));
    case 'heard':
      return onHeard(state, event, nowMicros);
    case 'tick':
      return onTick(state, nowMicros);
    case 'acknowledge':
      return onAcknowledge(state, event, nowMicros);
    case 'published': {
      const alarm = state.alarms[event.alarm];
      return quiet(alarm === undefined ? state : withAlarm(state, published(alarm, nowMicros)));
    }
    case 'recall':
      return quiet(state.alarms[event.alarm.id] === undefined ? withAlarm(state, event.alarm) : state);
    case 'definition':
      return quiet({ ...state, definition: event.definition });
  }
}

const quiet = (state: DeskState): DeskStep => ({ state, effects: [] });

function onAcknowledge(
  state: DeskState,
  { alarm: id, by, note }: { alarm: string; by: string; note: string },
  nowMicros: Micros,
): DeskStep {
  const alarm = state.alarms[id];
  if (alarm === undefined) return refused(state, 'NOT_FOUND', id, 'the desk has no alarm of this id');
  if (!mayAcknowledge(alarm)) {
    return refused(
      state,
      'ALARM_STATE',
      id,
      `it is "${alarm.state}", answered by ${alarm.acknowledged?.by ?? 'nobody'}`,
    );
  }
  return quiet(withAlarm(state, acknowledge(alarm, by, note, nowMicros)));
}

function refused(state: DeskState, code: 'NOT_FOUND' | 'ALARM_STATE', where: string, detail: string): DeskStep {
  return { state, effects: [{ kind: 'refused', complaint: { code, where, detail } }] };
}

function changed(before: DeskState, after: DeskState, publish: boolean): DeskEffect[] {
  if (before.alarms === after.alarms) return [];
  return Object.values(after.alarms)
    .filter((alarm) => before.alarms[alarm.id] !== alarm)
    .map((alarm) => ({ kind: 'alarm', alarm, publish }));
}

function bridgeOf(event: DeskEvent): string | null {
  switch (event.kind) {
    case 'level':
      return event.level.bridge;
    case 'progress':
      return event.progress.bridge;
    case 'passage':
      return event.passage.bridge;
    case 'settled':
      return event.bridge;
    case 'condition':
      return event.condition.bridge;
    case 'recall':
      return event.alarm.bridge;
    case 'definition':
      return event.definition.id;
    default:
      return null;
  }
}
