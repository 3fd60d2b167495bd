import type { Alarm, AlarmStep } from '../contract/alarm.ts';
import type { SensorCondition } from '../contract/health.ts';
import type { Micros } from '../contract/time.ts';

/** What is wrong with a sensor, as its alarm tells it: each is kept as the note of the step that it raised. */
export interface Fault {
  code: string;
  detail: string;
}

/** `flat (the value has not moved for 5 s)` */
export const faultNote = (code: string, detail: string): string => (detail === '' ? code : `${code} (${detail})`);

/** The faults that a sensor's alarm tells of, in the order they came, since it was raised or last began anew. */
export function faultsOf(alarm: Alarm): Fault[] {
  return stretch(alarm).flatMap(({ note }) => (note === null ? [] : [faultOf(note)]));
}

/** Whether the alarm tells of a condition; a step without a note tells of whatever began at its time. */
export function tellsOf(alarm: Alarm, { code, micros }: SensorCondition): boolean {
  return stretch(alarm).some(({ note, micros: at }) => (note === null ? at === micros : faultOf(note).code === code));
}

/** When the alarm was raised, or last began anew. */
export function stretchMicros(alarm: Alarm): Micros {
  return stretch(alarm)[0]?.micros ?? alarm.raisedMicros;
}

function stretch({ steps, returnedMicros }: Alarm): AlarmStep[] {
  const ends = steps.flatMap(({ what }, i) => (what === 'returned' ? [i] : []));
  const lastEnd = returnedMicros === null ? ends.at(-1) : ends.at(-2);
  return steps.slice((lastEnd ?? -1) + 1).filter(({ what }) => what === 'raised');
}

function faultOf(note: string): Fault {
  const at = note.indexOf(' (');
  return at < 0 ? { code: note, detail: '' } : { code: note.slice(0, at), detail: note.slice(at + 2, -1) };
}
