import type { Alarm } from '../contract/alarm.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { escalate, giveBack, raise } from './life.ts';
import { withoutGone } from './gone.ts';
import { trimmed, withAlarm, type DeskEffect, type DeskState, type DeskStep } from './state.ts';
import { noDataMessage } from './wording.ts';

/** A logger is silent after this long where its definition says nothing, s. */
export const DEFAULT_SILENT_AFTER_S = 30;
/** Silence of this many times `silentAfterS` is graver: IL. */
export const GRAVE_SILENCE = 10;

/** Data came: an alarm of silence is back to normal, and a hole between the newest samples is an interval without data. */
export function onHeard(
  state: DeskState,
  { logger, fromMicros, toMicros }: { logger: string; fromMicros: Micros; toMicros: Micros },
  nowMicros: Micros,
): DeskStep {
  const before = state.loggers[logger];
  const alarm = silenceOf(state, logger);
  const newestMicros = alarm === null ? Math.max(before?.newestMicros ?? 0, toMicros) : toMicros;
  const heard = { ...state, loggers: { ...state.loggers, [logger]: { newestMicros, heardMicros: nowMicros } } };
  const after = silentAfterMicros(state, logger);
  if (alarm !== null) {
    const lastMicros = before?.newestMicros ?? alarm.raisedMicros - after;
    const silences = Object.fromEntries(Object.entries(state.silences).filter(([silent]) => silent !== logger));
    return {
      state: withAlarm({ ...heard, silences }, giveBack(alarm, Math.max(fromMicros, alarm.raisedMicros), nowMicros)),
      effects: [noData(state, logger, lastMicros, fromMicros)],
    };
  }
  const hole = before !== undefined && fromMicros - before.newestMicros > after;
  return { state: heard, effects: hole ? [noData(state, logger, before.newestMicros, fromMicros)] : [] };
}

/**
 * The wall clock went on. A logger that was heard once and is silent for longer than `silentAfterS` raises an alarm (AL);
 * when it has been silent for ten times as long, the alarm becomes IL, which asks for a new answer. A logger that was never heard raises none: its bridge has "no data yet".
 *
 * The alarm's time is the event time at which the silence became too long: newest sample + `silentAfterS`. Silence counts
 * from when the logger was last heard, or from when the server came up again: meanwhile nobody listened.
 */
export function onTick(state: DeskState, nowMicros: Micros): DeskStep {
  const effects: DeskEffect[] = [];
  let next = withoutGone(state, nowMicros);
  for (const { id: logger } of state.definition.loggers) {
    const heard = state.loggers[logger];
    const alarm = silenceOf(state, logger);
    const after = silentAfterMicros(state, logger);
    if (alarm !== null) {
      next = withAlarm(next, prolonged(state, alarm, nowMicros, after));
    } else if (heard !== undefined && nowMicros - heard.heardMicros > after) {
      const silence = raised(state, logger, heard.newestMicros, after, nowMicros);
      next = { ...next, silences: { ...next.silences, [logger]: silence.id } };
      next = trimmed(withAlarm(next, silence));
      effects.push(noData(state, logger, heard.newestMicros, null));
    }
  }
  return { state: next, effects };
}

/** The alarm of a logger's silence that lasts, or null. */
export function silenceOf(state: DeskState, logger: string): Alarm | null {
  const id = state.silences[logger];
  return id === undefined ? null : (state.alarms[id] ?? null);
}

function raised(state: DeskState, logger: string, newestMicros: Micros, after: Micros, takenMicros: Micros): Alarm {
  const { definition } = state;
  const sighting = { micros: newestMicros + after, takenMicros, severity: 'AL', value: null, sensor: null } as const;
  return {
    ...raise(definition.id, 'no data', logger, sighting),
    message: noDataMessage(definition, logger, newestMicros, after),
  };
}

/** Counted on the wall clock from when the alarm was raised, so that a restart of the server does not begin anew. */
function prolonged({ definition }: DeskState, alarm: Alarm, nowMicros: Micros, after: Micros): Alarm {
  const lastedMicros = nowMicros - alarm.steps[0]!.takenMicros + after;
  if (lastedMicros < GRAVE_SILENCE * after || alarm.severity === 'IL') return alarm;
  const micros = alarm.raisedMicros + (GRAVE_SILENCE - 1) * after;
  const graver = escalate(alarm, { micros, takenMicros: nowMicros, severity: 'IL', value: null, sensor: null });
  const sinceMicros = alarm.raisedMicros - after;
  return { ...graver, message: noDataMessage(definition, alarm.rule, sinceMicros, GRAVE_SILENCE * after) };
}

function silentAfterMicros(state: DeskState, logger: string): Micros {
  const defined = state.definition.loggers.find(({ id }) => id === logger)?.silentAfterS;
  return (defined ?? DEFAULT_SILENT_AFTER_S) * MICROS_PER_SECOND;
}

/** Empty, but not turned round, where the logger's clock was set back meanwhile. */
function noData(state: DeskState, logger: string, fromMicros: Micros, toMicros: Micros | null): DeskEffect {
  const end = toMicros === null ? null : Math.max(fromMicros, toMicros);
  return { kind: 'no data', noData: { bridge: state.definition.id, logger, fromMicros, toMicros: end } };
}
