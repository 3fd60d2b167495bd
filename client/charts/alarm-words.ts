import type { Alarm, AlarmState, AlarmStep } from '#core/contract/alarm.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Levels } from '#core/contract/severity.ts';
import { fixed } from '../format.ts';
import { clockTenthsIn } from '../time.ts';

/** The words of an alarm: what it is about, its value against its limit, its steps. */

export const LIMIT_NAMES = { AL: 'alert limit', IL: 'intervention limit', IAL: 'immediate action limit' } as const;

export const GROUPS: readonly { state: AlarmState; title: string; meaning: string }[] = [
  { state: 'unacknowledged', title: 'Unacknowledged', meaning: 'needs an answer' },
  {
    state: 'returned to normal, unacknowledged',
    title: 'Returned to normal',
    meaning: 'unacknowledged, needs an answer',
  },
  { state: 'acknowledged', title: 'Acknowledged', meaning: 'answered, still abnormal' },
  { state: 'normal', title: 'Normal', meaning: 'back to normal and answered' },
];

export const needsAnswer = ({ state }: Pick<Alarm, 'state'>): boolean =>
  state === 'unacknowledged' || state === 'returned to normal, unacknowledged';

/** What the alarm is about, in a few words. */
export function subjectOf(alarm: Alarm): string {
  if (alarm.kind === 'no data') return `no data from logger ${alarm.rule}`;
  if (alarm.kind === 'sensor') {
    const faults = alarm.steps.filter(({ what, note }) => what === 'raised' && note !== null);
    const clock = faults.length > 0 && faults.every(({ note }) => note!.startsWith('clock step'));
    return clock ? `clock of the logger of ${alarm.rule} not to be trusted` : `sensor ${alarm.rule} not to be trusted`;
  }
  return 'peak deck acceleration';
}

/** The levels of the limit that raised a level alarm. */
export function levelsOf(alarm: Alarm, definition: BridgeDefinition | undefined): Levels | undefined {
  if (alarm.kind !== 'level') return undefined;
  return definition?.limits.find(({ id }) => id === alarm.rule)?.levels;
}

/** The sensor whose value is told: that of the record once it is known, else the one that told live. */
export function sensorOf(alarm: Alarm): string | null {
  if (alarm.recordValue === null) return alarm.sensor;
  const judged = alarm.steps.findLast(({ what, sensor }) => sensor !== null && JUDGED.has(what));
  return judged?.sensor ?? alarm.sensor;
}

const JUDGED: ReadonlySet<string> = new Set(['confirmed', 'corrected']);

/** The value that counts: the record's where it is known, else the live one. */
export const valueOf = (alarm: Alarm): number | null => alarm.recordValue ?? alarm.liveValue;

/** Whether the value that counts is but a lower bound. */
export const isAtLeast = (alarm: Alarm): boolean => alarm.recordAtLeast === true && alarm.recordValue !== null;

/** `0.12 above IL 2.80`, or how far below its own limit the record has found it. */
export function againstLimit(alarm: Alarm, levels: Levels | undefined): string {
  const value = valueOf(alarm);
  const limit = levels?.[alarm.severity];
  if (value === null || limit === undefined) return alarm.severity;
  const above = value - limit;
  if (isAtLeast(alarm) && above < 0) return `not known to be below ${alarm.severity} ${fixed(limit, 2)}`;
  return `${fixed(Math.abs(above), 2)} ${above >= 0 ? 'above' : 'below'} ${alarm.severity} ${fixed(limit, 2)}`;
}

/** What the record made of a level alarm. */
export interface RecordWords {
  /** In a list. */
  brief: string;
  value: string;
  /** What that value is, or why there is none. */
  meaning: string;
}

/** What the record of the passage made of a level alarm, or why there is none that could. */
export function recordWords(alarm: Alarm): RecordWords {
  const atLeast = isAtLeast(alarm) ? 'at least ' : '';
  const value = alarm.recordValue === null ? 'none' : `${atLeast}${fixed(alarm.recordValue, 2)} m/s²`;
  const found = alarm.recordSeverity === null ? 'below all limits' : `above ${alarm.recordSeverity}`;
  switch (alarm.verdict) {
    case null:
      return {
        brief: 'live value, the record is not known yet',
        value: 'not known yet',
        meaning: 'zero-phase filter, whole window, after the passage',
      };
    case 'confirmed':
      return { brief: 'confirmed by the record', value, meaning: 'confirms the alarm' };
    case 'corrected':
      return { brief: `the record finds it ${found}`, value, meaning: `corrects it: ${found}` };
    case 'inconclusive': {
      const why = alarm.steps.findLast(({ what }) => what === 'inconclusive')?.note ?? 'cannot judge it';
      return { brief: 'live value, the record cannot judge it', value, meaning: `it ${why}: the live value stands` };
    }
    case 'no passage':
      return {
        brief: 'live value, no train was recognised',
        value,
        meaning: 'no train was recognised, so no record was made: the live value stands',
      };
  }
}

/** One step of an alarm's life as a sentence. */
export function stepWords(step: AlarmStep): string {
  const value = step.value === null ? '' : ` ${fixed(step.value, 2)} m/s²`;
  const on = step.sensor === null ? '' : ` on ${step.sensor}`;
  const level = step.severity === null ? '' : ` ${step.severity}`;
  switch (step.what) {
    case 'raised':
      return `raised,${level}${value}${on}${step.note === null ? '' : `: ${step.note}`}`;
    case 'escalated':
      return `escalated to${level},${value}${on}`;
    case 'confirmed':
      return `confirmed by the record:${level},${value}${on}`;
    case 'corrected':
      return `corrected by the record:${level || ' below all limits'},${value}${on}`;
    case 'inconclusive':
      return `the record ${step.note ?? 'cannot judge it'}: the live value stands`;
    case 'no passage':
      return 'no train was recognised: the live value stands';
    case 'returned':
      return `returned to normal${step.note === null ? '' : `: ${step.note}`}`;
    case 'acknowledged':
      return `acknowledged${step.by === null ? '' : ` by ${step.by}`}${step.note ? `: ${step.note}` : ''}`;
    case 'published':
      return 'published on MQTT';
  }
}

/** How long the server took from the samples' time to the step; empty for steps that have no event time. */
export function delayWords(step: AlarmStep): string {
  const seconds = (step.takenMicros - step.micros) / 1e6;
  return seconds >= 0.05 && seconds < 3600 ? `taken ${fixed(seconds, seconds < 10 ? 1 : 0)} s later` : '';
}

/** An alarm in one line, for a print: `Alarm IL raised 06:46:13.4 UTC, acknowledged by M. Orrell: told desk 2` */
export function alarmLine(alarm: Alarm): string {
  const answer = alarm.acknowledged
    ? `acknowledged by ${alarm.acknowledged.by}${alarm.acknowledged.note ? `: ${alarm.acknowledged.note.replace(/\.$/, '')}` : ''}`
    : alarm.state;
  return `Alarm ${alarm.severity} raised ${clockTenthsIn(alarm.raisedMicros)} UTC, ${answer}`;
}
