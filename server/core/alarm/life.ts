import type { Alarm, AlarmKind, AlarmState, AlarmStep, Verdict } from '../contract/alarm.ts';
import { severityRank, type Severity } from '../contract/severity.ts';
import { timeName, type Micros } from '../contract/time.ts';

/**
 * The life of one alarm, after ISA-18.2 / IEC 62682.
 *
 * | state                               | passed again, graver | passed again, no graver | returned                            | acknowledged   |
 * |-------------------------------------|----------------------|-------------------------|-------------------------------------|----------------|
 * | (none)                              | unacknowledged       | unacknowledged          | (none)                              | refused        |
 * | unacknowledged                      | unacknowledged       | unacknowledged          | returned to normal, unacknowledged  | acknowledged   |
 * | acknowledged                        | unacknowledged       | acknowledged            | normal                              | refused        |
 * | returned to normal, unacknowledged  | unacknowledged       | unacknowledged          | the same                            | normal         |
 * | normal                              | unacknowledged       | acknowledged            | the same                            | refused        |
 *
 * What was answered was the severity of that moment: a graver one asks for a new answer, the old one stays among the steps.
 * A correction by the record, or a late sample from before the return, that finds a graver severity leaves a returned alarm
 * returned: normal → returned to normal, unacknowledged. Severity never falls.
 *
 * For a sensor's alarm another fault that it does not tell of yet counts as graver (its severity stays): it was in nobody's
 * answer.
 */
export const MAX_STEPS = 200;

export interface Sighting {
  /** Event time. */
  micros: Micros;
  takenMicros: Micros;
  severity: Severity;
  value: number | null;
  sensor: string | null;
  /** Of a fault of a sensor. */
  note?: string;
}

/** `bridge-rule-20261201-051233-2`: the same samples give the same id, however often they are read. */
export function alarmId(bridge: string, rule: string, firstMicros: Micros): string {
  return `${bridge}-${rule}-${timeName(firstMicros)}`;
}

/** A new alarm, unacknowledged. `message` is left to the caller, who knows the bridge. */
export function raise(bridge: string, kind: AlarmKind, rule: string, sighting: Sighting): Alarm {
  const { micros, severity, value, sensor } = sighting;
  return {
    id: alarmId(bridge, rule, micros),
    bridge,
    kind,
    rule,
    state: 'unacknowledged',
    severity,
    raisedMicros: micros,
    liveValue: value,
    sensor,
    sensors: sensor === null ? [] : [sensor],
    recordValue: null,
    recordSeverity: null,
    verdict: null,
    doubt: null,
    passage: null,
    passagesAboveInDay: 0,
    returnedMicros: null,
    acknowledged: null,
    steps: [step('raised', sighting)],
    message: '',
  };
}

/** Whether the excursion lasts. */
export function isActive(alarm: Alarm): boolean {
  return alarm.state === 'unacknowledged' || alarm.state === 'acknowledged';
}

/** Whether it still needs an eye: all but back to normal and answered. */
export function isOpen(alarm: Alarm): boolean {
  return alarm.state !== 'normal';
}

/** A graver severity was met. Nothing changes where it is not graver. */
export function escalate(alarm: Alarm, sighting: Sighting): Alarm {
  if (severityRank(sighting.severity) <= severityRank(alarm.severity)) return alarm;
  return withStep(
    { ...alarm, severity: sighting.severity, state: unanswered(alarm.state), acknowledged: null },
    step('escalated', sighting),
  );
}

/** The excursion began once more in the same passage. */
export function reopen(alarm: Alarm, sighting: Sighting): Alarm {
  if (isActive(alarm)) return alarm;
  const state = alarm.state === 'normal' ? 'acknowledged' : 'unacknowledged';
  return withStep({ ...alarm, state, returnedMicros: null }, step('raised', sighting));
}

/** Something else that the alarm does not tell of yet, no graver: what was answered did not know of it. */
export function raiseAgain(alarm: Alarm, sighting: Sighting): Alarm {
  return withStep({ ...alarm, state: unanswered(alarm.state), acknowledged: null }, step('raised', sighting));
}

/** The excursion is over. */
export function giveBack(alarm: Alarm, micros: Micros, takenMicros: Micros, note: string | null = null): Alarm {
  if (!isActive(alarm)) return alarm;
  const state = alarm.state === 'acknowledged' ? 'normal' : 'returned to normal, unacknowledged';
  return withStep({ ...alarm, state, returnedMicros: micros }, { ...plainStep('returned', micros, takenMicros), note });
}

/** Whether a person may acknowledge it now. */
export function mayAcknowledge(alarm: Alarm): boolean {
  return alarm.state === 'unacknowledged' || alarm.state === 'returned to normal, unacknowledged';
}

/** A person has seen it. Call only where `mayAcknowledge`. */
export function acknowledge(alarm: Alarm, by: string, note: string, micros: Micros): Alarm {
  const state = alarm.state === 'unacknowledged' ? 'acknowledged' : 'normal';
  return withStep(
    { ...alarm, state, acknowledged: { micros, by, note } },
    { ...plainStep('acknowledged', micros, micros), severity: alarm.severity, by, note },
  );
}

/** It went out to the broker. */
export function published(alarm: Alarm, micros: Micros): Alarm {
  return withStep(alarm, { ...plainStep('published', micros, micros), severity: alarm.severity });
}

/** The record has spoken: same severity as live, or not. Severity rises with it and never falls. */
export function judge(
  alarm: Alarm,
  record: { value: number; severity: Severity | null; micros: Micros; atLeast?: boolean },
  live: Severity | null,
  takenMicros: Micros,
  sensor: string | null,
): Alarm {
  const verdict = record.severity === live ? 'confirmed' : 'corrected';
  const graver = severityRank(record.severity) > severityRank(alarm.severity);
  return withStep(
    {
      ...alarm,
      ...(graver && record.severity !== null
        ? { severity: record.severity, state: unanswered(alarm.state), acknowledged: null }
        : {}),
      recordValue: record.value,
      recordSeverity: record.severity,
      ...(record.atLeast === true ? { recordAtLeast: true } : {}),
      verdict,
    },
    { ...plainStep(verdict, record.micros, takenMicros), severity: record.severity, value: record.value, sensor },
  );
}

/** No record takes a stand, nor will: what live saw stands. */
export function letStand(
  alarm: Alarm,
  verdict: Extract<Verdict, 'inconclusive' | 'no passage'>,
  { micros, takenMicros }: Pick<Sighting, 'micros' | 'takenMicros'>,
  note: string | null = null,
): Alarm {
  return withStep({ ...alarm, verdict }, { ...plainStep(verdict, micros, takenMicros), note });
}

/**
 * Adds a step. An alarm keeps 200: beyond, the oldest `published` step goes, else the oldest step after the first that is
 * no acknowledgement, else the second. What was raised first, and who answered, stays.
 */
export function withStep(alarm: Alarm, added: AlarmStep): Alarm {
  const steps = [...alarm.steps, added];
  if (steps.length > MAX_STEPS) steps.splice(dispensable(steps), 1);
  return { ...alarm, steps };
}

function dispensable(steps: readonly AlarmStep[]): number {
  const publishedAt = steps.findIndex((s) => s.what === 'published');
  if (publishedAt >= 0) return publishedAt;
  const plainAt = steps.findIndex((s, index) => index > 0 && s.what !== 'acknowledged');
  return plainAt >= 0 ? plainAt : 1;
}

const unanswered = (state: AlarmState): AlarmState =>
  state === 'unacknowledged' || state === 'acknowledged' ? 'unacknowledged' : 'returned to normal, unacknowledged';

function step(what: AlarmStep['what'], sighting: Sighting): AlarmStep {
  const { micros, takenMicros, severity, value, sensor, note = null } = sighting;
  return { micros, takenMicros, what, severity, value, sensor, by: null, note };
}

function plainStep(what: AlarmStep['what'], micros: Micros, takenMicros: Micros): AlarmStep {
  return { micros, takenMicros, what, severity: null, value: null, sensor: null, by: null, note: null };
}
