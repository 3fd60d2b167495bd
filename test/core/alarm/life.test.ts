import { describe, expect, test } from 'vitest';
import {
  acknowledge,
  alarmId,
  escalate,
  giveBack,
  isActive,
  isOpen,
  judge,
  MAX_STEPS,
  mayAcknowledge,
  reopen,
  withStep,
} from '#core/alarm/life.ts';
import type { Alarm, AlarmState } from '#core/contract/alarm.ts';
import type { Severity } from '#core/contract/severity.ts';
import { anAlarm, DAWN } from '../../support/specimen.ts';

const STATES: readonly AlarmState[] = [
  'unacknowledged',
  'acknowledged',
  'returned to normal, unacknowledged',
  'normal',
];
const inState = (state: AlarmState): Alarm =>
  anAlarm(DAWN, 'IL', { state, returnedMicros: state === 'unacknowledged' || state === 'acknowledged' ? null : DAWN });
const again = (severity: Severity) => ({ micros: DAWN + 1, takenMicros: DAWN + 2, severity, value: 3, sensor: 'A2' });

/** Each row of the table in life.ts: after graver, no graver, returned, acknowledged (null: refused). */
const TABLE: Record<AlarmState, [AlarmState, AlarmState, AlarmState, AlarmState | null]> = {
  unacknowledged: ['unacknowledged', 'unacknowledged', 'returned to normal, unacknowledged', 'acknowledged'],
  acknowledged: ['unacknowledged', 'acknowledged', 'normal', null],
  'returned to normal, unacknowledged': [
    'unacknowledged',
    'unacknowledged',
    'returned to normal, unacknowledged',
    'normal',
  ],
  normal: ['unacknowledged', 'acknowledged', 'normal', null],
};

describe('the table of states', () => {
  test.each(STATES)('holds for an alarm that is "%s"', (state) => {
    const alarm = inState(state);
    const [graver, same, returned, acknowledged] = TABLE[state];
    expect(escalate(reopen(alarm, again('IAL')), again('IAL')).state).toBe(graver);
    expect(escalate(reopen(alarm, again('AL')), again('AL')).state).toBe(same);
    expect(giveBack(alarm, DAWN, DAWN).state).toBe(returned);
    expect(mayAcknowledge(alarm)).toBe(acknowledged !== null);
    if (acknowledged !== null) expect(acknowledge(alarm, 'x', '', DAWN).state).toBe(acknowledged);
    expect(isActive(alarm)).toBe(state === 'unacknowledged' || state === 'acknowledged');
    expect(isOpen(alarm)).toBe(state !== 'normal');
  });

  test('leaves a returned alarm returned when a graver truth comes late, and asks for an answer again', () => {
    expect(escalate(inState('normal'), again('IAL')).state).toBe('returned to normal, unacknowledged');
    const record = { value: 3.9, severity: 'IAL', micros: DAWN } as const;
    expect(judge(inState('normal'), record, 'IL', DAWN, 'A1')).toMatchObject({
      state: 'returned to normal, unacknowledged',
      severity: 'IAL',
      verdict: 'corrected',
    });
    expect(judge(inState('normal'), { ...record, severity: 'IL' }, 'IL', DAWN, 'A1').state).toBe('normal');
  });
});

test('ids are of bridge, rule and time name', () => {
  expect(alarmId('ottermere', 'ballast', DAWN)).toBe('ottermere-ballast-20261201-051233-2');
});

describe('the limit of 200 steps', () => {
  const step = (what: Alarm['steps'][number]['what'], micros: number): Alarm['steps'][number] => ({
    ...anAlarm().steps[0]!,
    what,
    micros,
  });
  const filled = (whats: Alarm['steps'][number]['what'][]): Alarm =>
    whats.reduce((alarm, what, i) => withStep(alarm, step(what, i)), anAlarm());

  test('gives up published steps first', () => {
    const alarm = filled([...Array<'returned'>(198).fill('returned'), 'published', 'raised', 'raised']);
    expect(alarm.steps).toHaveLength(MAX_STEPS);
    expect(alarm.steps.some(({ what }) => what === 'published')).toBe(false);
  });

  test('then the oldest that are neither the first nor an answer', () => {
    const alarm = filled(['acknowledged', ...Array<'returned'>(250).fill('returned')]);
    expect(alarm.steps).toHaveLength(MAX_STEPS);
    expect(alarm.steps.slice(0, 3).map(({ what, micros }) => [what, micros])).toEqual([
      ['raised', DAWN],
      ['acknowledged', 0],
      ['returned', 53],
    ]);
  });

  test('then, with nothing but answers, the oldest of them', () => {
    const alarm = filled(Array<'acknowledged'>(210).fill('acknowledged'));
    expect(alarm.steps).toHaveLength(MAX_STEPS);
    expect(alarm.steps.slice(0, 2).map(({ micros }) => micros)).toEqual([DAWN, 11]);
  });
});
