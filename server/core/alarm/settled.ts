import type { Alarm } from '../contract/alarm.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { aloneDoubt } from './doubt.ts';
import { withoutForgotten } from './condition.ts';
import { said } from './level.ts';
import { letStand } from './life.ts';
import { withAlarm, type DeskState } from './state.ts';

/**
 * No passage that is yet to come reaches back before a time. A level alarm whose excursion ended before it, and that no
 * record has judged by now, is judged by none: no train was recognised, or its record was not made.
 *
 * The time counts by whole seconds, so that no split of the samples into blocks can matter. Where a logger's clock went
 * back it falls, and alarms wait until it has come again. A later record that includes the alarm after all, as when the
 * samples are read again under another definition, judges it.
 */
export function onSettled(state: DeskState, settledMicros: Micros, takenMicros: Micros): DeskState {
  const second = Math.floor(settledMicros / MICROS_PER_SECOND);
  if (second === state.settledSecond) return state;
  const micros = second * MICROS_PER_SECOND;
  const openedSecond = state.openedSecond < 0 ? second : state.openedSecond;
  const settled = { ...state, settledSecond: second, openedSecond };
  return Object.values(state.alarms)
    .filter((alarm) => isLeft(alarm, micros))
    .reduce(
      (now, alarm) => withAlarm(now, said(now, unjudged(now, alarm, takenMicros))),
      withoutForgotten(settled, micros, takenMicros),
    );
}

function isLeft({ kind, verdict, returnedMicros }: Alarm, micros: Micros): boolean {
  return kind === 'level' && verdict === null && returnedMicros !== null && returnedMicros < micros;
}

function unjudged(state: DeskState, alarm: Alarm, takenMicros: Micros): Alarm {
  const { passage, raisedMicros } = alarm;
  const sighting = { micros: alarm.returnedMicros ?? raisedMicros, takenMicros };
  const recorded = state.records.some((record) => record.passage === passage);
  if (recorded) return letStand(alarm, 'inconclusive', sighting, 'says nothing of this limit');
  if (passage !== null) {
    return letStand({ ...alarm, passage: null }, 'inconclusive', sighting, `of ${passage} was not made`);
  }
  const late = state.records.some(
    ({ startMicros, endMicros }) => startMicros <= raisedMicros && raisedMicros <= endMicros,
  );
  return late
    ? letStand(alarm, 'inconclusive', sighting, 'was made before these samples came')
    : aloneDoubt(letStand(alarm, 'no passage', sighting));
}
