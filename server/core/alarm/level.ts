import type { Alarm } from '../contract/alarm.ts';
import type { LevelEvent, PassageProgress } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { aloneDoubt, conditionsDoubt, withoutAlone } from './doubt.ts';
import { alarmId, escalate, giveBack, isActive, letStand, raise, reopen, type Sighting } from './life.ts';
import { trimmed, withAlarm, type DeskState } from './state.ts';
import { levelMessage } from './wording.ts';

const DAY_MICROS = 86_400 * MICROS_PER_SECOND;
/** A passage whose last axle has left is over for the desk after this long, should its record not come. */
const AFTER_LEAVING_MICROS = 30 * MICROS_PER_SECOND;
/** The detector needs some of the train's noise before it speaks: crossings this long before its onset are the train's. */
const BEFORE_ONSET_MICROS = 5 * MICROS_PER_SECOND;
/** An excursion that is still open after this long when the next train comes has lost its end. */
const STALE_MICROS = 300 * MICROS_PER_SECOND;
/** The detector has spoken by then. */
const DETECTION_MICROS = 10 * MICROS_PER_SECOND;

/** A channel passed a limit, or came back below all. */
export function onLevel(state: DeskState, event: LevelEvent, takenMicros: Micros): DeskState {
  return event.kind === 'passed' ? onPassed(state, event, takenMicros) : onReturned(state, event, takenMicros);
}

/** A passage began, its last axle left, or it turned out to be none. */
export function onProgress(state: DeskState, event: PassageProgress, takenMicros: Micros): DeskState {
  if (event.kind === 'entered') return onEntered(state, event, takenMicros);
  if (event.kind === 'left') {
    if (state.passage?.id !== event.passage || state.passage.leftMicros === event.micros) return state;
    return { ...state, passage: { ...state.passage, leftMicros: event.micros } };
  }
  const cleared = state.passage?.id === event.passage ? { ...state, passage: null } : state;
  return ofPassage(cleared, event.passage)
    .filter(({ verdict }) => verdict === null)
    .map((alarm) => letStand({ ...alarm, passage: null }, 'no passage', { micros: event.micros, takenMicros }))
    .reduce((now, alarm) => withAlarm(now, said(now, aloneDoubt(alarm))), cleared);
}

/** How many passages of the day before a time were above a limit, by their records. */
export function aboveInDay(state: DeskState, limit: string, micros: Micros, except: string | null): number {
  return state.above.filter(
    (one) => one.limit === limit && one.passage !== except && one.micros < micros && one.micros >= micros - DAY_MICROS,
  ).length;
}

/** The alarm with its sentence brought up to date. */
export function said(state: DeskState, alarm: Alarm): Alarm {
  const message = levelMessage(state.definition, alarm);
  return message === alarm.message ? alarm : { ...alarm, message };
}

function onPassed(state: DeskState, event: LevelEvent, takenMicros: Micros): DeskState {
  const sighting = { ...event, takenMicros };
  const known = alarmFor(state, event);
  if (known === null) return raised(state, event, sighting);
  const withSensor = excursed(state, known.id, event);
  return withAlarm(withSensor, said(state, joined(state, known, event, sighting)));
}

function raised(state: DeskState, event: LevelEvent, sighting: Sighting): DeskState {
  const passage = passageAt(state, event.micros);
  const alarm = conditionsDoubt(state, {
    ...raise(event.bridge, 'level', event.limit, sighting),
    passage,
    passagesAboveInDay: aboveInDay(state, event.limit, event.micros, passage),
  });
  return trimmed(withAlarm(excursed(state, alarm.id, event), said(state, alarm)));
}

/** The alarm with one more crossing in it; the same alarm where the crossing is not news. */
function joined(state: DeskState, alarm: Alarm, event: LevelEvent, sighting: Sighting): Alarm {
  const again = alarm.returnedMicros !== null && event.micros > alarm.returnedMicros;
  let next = escalate(again ? reopen(alarm, sighting) : alarm, sighting);
  const passage = next.passage ?? (next.verdict === null ? passageAt(state, event.micros) : null);
  if (passage !== next.passage) next = { ...next, passage };
  if (!next.sensors.includes(event.sensor)) {
    next = { ...withoutAlone(next), sensors: [...next.sensors, event.sensor] };
  }
  if (next.liveValue === null || event.value > next.liveValue) {
    next = conditionsDoubt(state, { ...next, liveValue: event.value, sensor: event.sensor });
  }
  return next;
}

function onReturned(state: DeskState, event: LevelEvent, takenMicros: Micros): DeskState {
  return levelAlarms(state)
    .filter((alarm) => alarm.rule === event.limit && alarm.raisedMicros <= event.micros)
    .reduce((now, alarm) => {
      const sensors = now.excursions[alarm.id];
      if (sensors?.[event.sensor] !== null) return now;
      const back = { ...sensors, [event.sensor]: event.micros };
      const next = { ...now, excursions: { ...now.excursions, [alarm.id]: back } };
      if (!Object.values(back).every((micros) => micros !== null)) return next;
      return withAlarm(next, giveBack(alarm, event.micros, takenMicros));
    }, state);
}

function onEntered(state: DeskState, event: PassageProgress, takenMicros: Micros): DeskState {
  if (state.passage?.id === event.passage) return state;
  const passage = { id: event.passage, onMicros: event.micros, leftMicros: null };
  let next: DeskState = { ...state, passage };
  for (const alarm of levelAlarms(state).toSorted((a, b) => b.raisedMicros - a.raisedMicros)) {
    if (isOfOnset(alarm, event) && !holds(next, alarm.rule, event.passage)) {
      next = withAlarm(next, { ...alarm, passage: event.passage });
    } else if (isActive(alarm) && alarm.raisedMicros < event.micros - STALE_MICROS) {
      // Its channels' return was lost in a crash; the ringing of a train just before is not touched.
      next = withAlarm(next, giveBack(alarm, event.micros, takenMicros));
    }
  }
  return next;
}

/** Whether the alarm was raised while the detector was making up its mind about this train. */
function isOfOnset(alarm: Alarm, { micros }: PassageProgress): boolean {
  const near = alarm.raisedMicros >= micros - BEFORE_ONSET_MICROS && alarm.raisedMicros <= micros + DETECTION_MICROS;
  return near && alarm.passage === null && alarm.verdict === null;
}

const holds = (state: DeskState, limit: string, passage: string): boolean =>
  ofPassage(state, passage).some((alarm) => alarm.rule === limit);

/** The alarm a crossing belongs to: the same crossing read again, the excursion that lasts, or the same passage. */
function alarmFor(state: DeskState, event: LevelEvent): Alarm | null {
  const same = state.alarms[alarmId(event.bridge, event.limit, event.micros)];
  if (same?.kind === 'level') return same;
  const alarms = levelAlarms(state).filter((alarm) => alarm.rule === event.limit);
  const passage = passageAt(state, event.micros);
  const ofSamePassage = passage === null ? undefined : alarms.find((alarm) => alarm.passage === passage);
  const lasting = alarms.find(
    (alarm) =>
      alarm.raisedMicros <= event.micros &&
      (alarm.returnedMicros === null || event.micros <= alarm.returnedMicros) &&
      (passage === null || alarm.passage === null),
  );
  return ofSamePassage ?? lasting ?? null;
}

/** The passage that a sample belongs to, as far as is known. */
function passageAt({ passage }: DeskState, micros: Micros): string | null {
  if (passage === null || micros < passage.onMicros - BEFORE_ONSET_MICROS) return null;
  return passage.leftMicros !== null && micros > passage.leftMicros + AFTER_LEAVING_MICROS ? null : passage.id;
}

/** The sensor is above, unless this crossing lies before its newest return. */
function excursed(state: DeskState, id: string, event: LevelEvent): DeskState {
  const sensors = state.excursions[id] ?? {};
  const back = sensors[event.sensor];
  if (back === null || (back !== undefined && event.micros <= back)) return state;
  const over = state.alarms[id]?.returnedMicros ?? null;
  if (over !== null && event.micros <= over) return state;
  return { ...state, excursions: { ...state.excursions, [id]: { ...sensors, [event.sensor]: null } } };
}

const levelAlarms = (state: DeskState): Alarm[] =>
  Object.values(state.alarms).filter((alarm) => alarm.kind === 'level');
const ofPassage = (state: DeskState, passage: string): Alarm[] =>
  levelAlarms(state).filter((alarm) => alarm.passage === passage);
