import type { Alarm } from '../contract/alarm.ts';
import type { ConditionCode, SensorCondition } from '../contract/health.ts';
import type { Micros } from '../contract/time.ts';
import { marked, withDoubt } from './doubt.ts';
import { giveBack, isActive, isOpen, raise, reopen } from './life.ts';
import { said } from './level.ts';
import { silenceOf } from './silence.ts';
import { trimmed, withAlarm, type DeskState } from './state.ts';
import { sensorMessage } from './wording.ts';

/**
 * Conditions that last and that somebody must go and see to; each raises the sensor's alarm (AL). The others are counted
 * and cast doubt on a level alarm of the sensor, but ask for no answer of their own.
 */
const ALARMING: readonly ConditionCode[] = ['silent', 'flat', 'noise high', 'rate wrong', 'twin channel'];

/** A condition of a sensor began, happened or ended. */
export function onCondition(state: DeskState, condition: SensorCondition, takenMicros: Micros): DeskState {
  const before = state.conditions[condition.sensor] ?? [];
  const others = before.filter(({ code }) => code !== condition.code);
  if (condition.state === 'ended') {
    return returned(withConditions(state, condition.sensor, others), condition, takenMicros);
  }
  const doubted = doubtLevels(withConditions(state, condition.sensor, [...others, condition]), condition);
  return condition.state === 'began' && ALARMING.includes(condition.code)
    ? raised(doubted, condition, takenMicros)
    : doubted;
}

/** One a code, so there are never more than there are codes. */
function withConditions(state: DeskState, sensor: string, conditions: SensorCondition[]): DeskState {
  return { ...state, conditions: { ...state.conditions, [sensor]: conditions } };
}

/** Level alarms that rest on this sensor and still last. */
function doubtLevels(state: DeskState, { sensor, code }: SensorCondition): DeskState {
  return Object.values(state.alarms)
    .filter((alarm) => alarm.kind === 'level' && alarm.sensor === sensor && isActive(alarm))
    .reduce((now, alarm) => withAlarm(now, said(now, withDoubt(alarm, marked(sensor, code)))), state);
}

function raised(state: DeskState, condition: SensorCondition, takenMicros: Micros): DeskState {
  const { sensor, micros, code, detail } = condition;
  const logger = state.definition.sensors.find(({ id }) => id === sensor)?.logger;
  // The silence of its logger says it already.
  if (code === 'silent' && logger !== undefined && silenceOf(state, logger) !== null) return state;
  const sighting = { micros, takenMicros, severity: 'AL', value: null, sensor } as const;
  const message = sensorMessage(state.definition, sensor, code, detail);
  const known = alarmOf(state, condition);
  if (known === null) {
    return trimmed(withAlarm(state, { ...raise(state.definition.id, 'sensor', sensor, sighting), message }));
  }
  if (known.returnedMicros === null || micros <= known.returnedMicros) return state;
  return withAlarm(state, { ...reopen(known, sighting), message });
}

function returned(state: DeskState, { sensor, micros }: SensorCondition, takenMicros: Micros): DeskState {
  const lasting = state.conditions[sensor]!.some((one) => one.state === 'began' && ALARMING.includes(one.code));
  if (lasting) return state;
  return sensorAlarms(state, sensor)
    .filter((alarm) => isActive(alarm) && alarm.raisedMicros <= micros)
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
