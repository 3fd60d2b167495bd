import type { Alarm } from '../contract/alarm.ts';
import type { ConditionCode, SensorCondition } from '../contract/health.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { marked, withDoubt } from './doubt.ts';
import { faultNote, faultsOf, stretchMicros, tellsOf } from './fault.ts';
import { giveBack, isActive, isOpen, raise, raiseAgain, reopen } from './life.ts';
import { said } from './level.ts';
import { silenceOf } from './silence.ts';
import { trimmed, withAlarm, type DeskState } from './state.ts';
import { sensorMessage } from './wording.ts';

/**
 * Conditions that last and that somebody must go and see to; each raises the sensor's alarm (AL). The others are counted
 * and cast doubt on a level alarm of the sensor, but ask for no answer of their own.
 */
const ALARMING: readonly ConditionCode[] = ['silent', 'flat', 'noise high', 'rate wrong', 'twin channel', 'clock step'];
/** Channels of one logger tell of its clock within this time. */
const TOGETHER_MICROS = 60 * MICROS_PER_SECOND;

/** A condition of a sensor began, happened or ended. */
export function onCondition(state: DeskState, condition: SensorCondition, takenMicros: Micros): DeskState {
  const before = state.conditions[condition.sensor] ?? [];
  const others = before.filter(({ code }) => code !== condition.code);
  if (condition.state === 'ended') {
    return returned(withConditions(state, condition.sensor, others), condition, takenMicros);
  }
  const known = turnedBack(withConditions(state, condition.sensor, [...others, condition]), condition);
  const doubted = doubtLevels(known, condition);
  return condition.state === 'began' && ALARMING.includes(condition.code)
    ? raised(doubted, condition, takenMicros)
    : doubted;
}

/** A pipeline that was opened anew has seen by then whether a fault still holds; noise takes it a minute. */
const SEEN_ANEW_MICROS = 180 * MICROS_PER_SECOND;

/**
 * Ends the alarms of faults that began before the pipeline was opened and that it has not seen since: a new one, as after a
 * change of the definition, does not know that they began, and so never says that they ended. A sensor's silence is not
 * the pipeline's to see.
 */
export function withoutForgotten(state: DeskState, micros: Micros, takenMicros: Micros): DeskState {
  const openedMicros = state.openedSecond * MICROS_PER_SECOND;
  if (micros - openedMicros < SEEN_ANEW_MICROS) return state;
  return Object.values(state.alarms)
    .filter((alarm) => alarm.kind === 'sensor' && isActive(alarm) && stretchMicros(alarm) < openedMicros)
    .filter((alarm) => !isLasting(state, alarm.rule) && faultsOf(alarm).every(({ code }) => code !== 'silent'))
    .reduce((now, alarm) => withAlarm(now, giveBack(alarm, micros, takenMicros, NOT_SEEN)), state);
}

const NOT_SEEN = 'not seen again since the samples are read anew';

function isLasting({ conditions }: DeskState, sensor: string): boolean {
  return (conditions[sensor] ?? []).some(({ state, code }) => state === 'began' && ALARMING.includes(code));
}

/** One a code, so there are never more than there are codes. */
function withConditions(state: DeskState, sensor: string, conditions: SensorCondition[]): DeskState {
  return { ...state, conditions: { ...state.conditions, [sensor]: conditions } };
}

/** Where a logger's clock went back, its newest sample is of a time that has been: its next silence counts from there. */
function turnedBack(state: DeskState, { sensor, code, state: now, micros }: SensorCondition): DeskState {
  const logger = loggerOf(state, sensor) ?? '';
  const heard = state.loggers[logger];
  if (code !== 'clock step' || now !== 'began' || heard === undefined || heard.newestMicros <= micros) return state;
  return { ...state, loggers: { ...state.loggers, [logger]: { ...heard, newestMicros: micros } } };
}

/** Level alarms that rest on this sensor and still last. */
function doubtLevels(state: DeskState, { sensor, code }: SensorCondition): DeskState {
  return Object.values(state.alarms)
    .filter((alarm) => alarm.kind === 'level' && alarm.sensor === sensor && isActive(alarm))
    .reduce((now, alarm) => withAlarm(now, said(now, withDoubt(alarm, marked(sensor, code)))), state);
}

/**
 * A sensor has one alarm at a time. A fault that it does not tell of yet was in nobody's answer: it is added, and a new
 * answer is asked for. One that it tells of, and that comes and goes while another lasts, is no news.
 */
function raised(state: DeskState, condition: SensorCondition, takenMicros: Micros): DeskState {
  const { sensor, micros, code, detail } = condition;
  if (isToldOfLogger(state, condition)) return state;
  const note = faultNote(code, detail);
  const sighting = { micros, takenMicros, severity: 'AL', value: null, sensor, note } as const;
  const known = alarmOf(state, condition);
  if (known === null) {
    return trimmed(withAlarm(state, worded(state, raise(state.definition.id, 'sensor', sensor, sighting))));
  }
  if (known.returnedMicros === null) {
    const isNews = micros >= stretchMicros(known) && !tellsOf(known, condition);
    return isNews ? withAlarm(state, worded(state, raiseAgain(known, sighting))) : state;
  }
  return micros <= known.returnedMicros ? state : withAlarm(state, worded(state, reopen(known, sighting)));
}

const worded = (state: DeskState, alarm: Alarm): Alarm => ({
  ...alarm,
  message: sensorMessage(state.definition, alarm.rule, faultsOf(alarm)),
});

/** What is wrong with a whole logger is said once: its silence by an alarm of its own, its clock by its first sensor. */
function isToldOfLogger(state: DeskState, { sensor, code, micros }: SensorCondition): boolean {
  const logger = loggerOf(state, sensor);
  if (logger === undefined) return false;
  if (code === 'silent') return silenceOf(state, logger) !== null;
  if (code !== 'clock step') return false;
  return Object.values(state.alarms).some(
    (alarm) =>
      alarm.kind === 'sensor' &&
      alarm.rule !== sensor &&
      loggerOf(state, alarm.rule) === logger &&
      faultsOf(alarm).some((fault) => fault.code === code) &&
      stretchMicros(alarm) - TOGETHER_MICROS <= micros &&
      (alarm.returnedMicros === null || micros <= alarm.returnedMicros),
  );
}

const loggerOf = ({ definition }: DeskState, sensor: string): string | undefined =>
  definition.sensors.find(({ id }) => id === sensor)?.logger;

function returned(state: DeskState, { sensor, micros }: SensorCondition, takenMicros: Micros): DeskState {
  if (isLasting(state, sensor)) return state;
  return sensorAlarms(state, sensor)
    .filter((alarm) => isActive(alarm) && stretchMicros(alarm) <= micros)
    .reduce((now, alarm) => withAlarm(now, giveBack(alarm, micros, takenMicros)), state);
}

/** The sensor's open alarm, or the closed one in whose time the condition lies: a replay. */
function alarmOf(state: DeskState, { sensor, micros }: SensorCondition): Alarm | null {
  const alarms = sensorAlarms(state, sensor);
  const replayed = alarms.find(
    (alarm) => alarm.raisedMicros <= micros && alarm.returnedMicros !== null && micros <= alarm.returnedMicros,
  );
  return replayed ?? alarms.find(isOpen) ?? null;
}

const sensorAlarms = (state: DeskState, sensor: string): Alarm[] =>
  Object.values(state.alarms).filter((alarm) => alarm.kind === 'sensor' && alarm.rule === sensor);
