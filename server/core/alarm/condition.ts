import type { Alarm } from '../contract/alarm.ts';
import type { ConditionCode, SensorCondition } from '../contract/health.ts';
import type { Micros } from '../contract/time.ts';
import { withDoubt } from './doubt.ts';
import { giveBack, isActive, isOpen, raise, reopen } from './life.ts';
import { said } from './level.ts';
import { silenceOf } from './silence.ts';
import { trimmed, withAlarm, type DeskState } from './state.ts';
import { sensorMessage } from './wording.ts';

/**
 * Conditions that last and that somebody must go and see to; each raises the sensor's alarm (AL). The others are counted
 * and cast doubt on a level alarm of the sensor, but ask for no answer of their own.
 */
export const ALARMING: readonly ConditionCode[] = ['silent', 'flat', 'noise high', 'rate wrong', 'twin channel'];

/** Conditions of one sensor that are remembered; one a code. */
const REMEMBERED = 32;

/** A condition of a sensor began, happened or ended. */
export function onCondition(state: DeskState, condition: SensorCondition, takenMicros: Micros): DeskState {
  const before = state.conditions[condition.sensor] ?? [];
  const others = before.filter(({ code }) => code !== condition.code);
  const now = condition.state === 'ended' ? others : [...others, condition].slice(-REMEMBERED);
  const known = before.find(({ code }) => code === condition.code);
  const news = known === undefined || known.micros !== condition.micros || known.state !== condition.state;
  const next =
    condition.state === 'ended'
      ? withConditions(state, condition.sensor, now)
      : news
        ? withConditions(state, condition.sensor, now)
        : state;
  if (condition.state === 'ended') return returned(next, condition, takenMicros);
  const doubted = doubtLevels(next, condition);
  return condition.state === 'began' && ALARMING.includes(condition.code)
    ? raised(doubted, condition, takenMicros)
    : doubted;
}

function withConditions(state: DeskState, sensor: string, conditions: SensorCondition[]): DeskState {
  if (conditions.length === 0 && state.conditions[sensor] === undefined) return state;
  return { ...state, conditions: { ...state.conditions, [sensor]: conditions } };
}

/** Level alarms that rest on this sensor and still last. */
function doubtLevels(state: DeskState, { sensor, code }: SensorCondition): DeskState {
  return Object.values(state.alarms)
    .filter((alarm) => alarm.kind === 'level' && alarm.sensor === sensor && isActive(alarm))
    .reduce((now, alarm) => withAlarm(now, said(now, withDoubt(alarm, `${sensor} is marked "${code}"`))), state);
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
  const lasting = (state.conditions[sensor] ?? []).some((one) => one.state === 'began' && ALARMING.includes(one.code));
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
