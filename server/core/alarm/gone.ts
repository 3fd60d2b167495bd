import type { Alarm } from '../contract/alarm.ts';
import type { BridgeDefinition } from '../contract/bridge.ts';
import type { Micros } from '../contract/time.ts';
import { giveBack, isActive } from './life.ts';
import { withAlarm, type DeskState } from './state.ts';

/**
 * Ends the alarms of loggers, sensors and limits that the definition no longer has: nothing of theirs will ever come that
 * could end them. They still ask for their answer.
 */
export function withoutGone(state: DeskState, nowMicros: Micros): DeskState {
  const gone = Object.values(state.alarms).filter((alarm) => isActive(alarm) && isGone(state.definition, alarm));
  if (gone.length === 0) return state;
  const ended = gone.reduce((now, alarm) => {
    const micros = Math.max(alarm.raisedMicros, nowMicros);
    return withAlarm(now, giveBack(alarm, micros, nowMicros, `${alarm.rule} is no longer in the definition`));
  }, state);
  const silences = Object.entries(state.silences).filter(([, id]) => !gone.some((alarm) => alarm.id === id));
  return { ...ended, silences: Object.fromEntries(silences) };
}

function isGone({ loggers, sensors, limits }: BridgeDefinition, { kind, rule }: Alarm): boolean {
  const known = { level: limits, 'no data': loggers, sensor: sensors }[kind];
  return !known.some(({ id }) => id === rule);
}
