import { describe, expect, test } from 'vitest';
import { recordDoubt } from '#core/alarm/doubt.ts';
import { liveSeverity, recordOfLimit } from '#core/alarm/record.ts';
import { levelMessage } from '#core/alarm/wording.ts';
import { measured, notMeasurable } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import { aDefinition, aPassage, anAlarm, DAWN } from '../../support/specimen.ts';

const LIMIT = aDefinition().limits[0]!;
/** The passage with its peak held against no limit, so that the channels must be asked. */
const ofChannels = (passage: Passage): Passage => ({ ...passage, peak: { ...passage.peak, limit: null } });

describe('the record for a limit', () => {
  test('is the passage own peak where that was held against the limit', () => {
    const passage = aPassage({ peaks: { A1: 2.9, A2: 2.4 } });
    expect(recordOfLimit(aDefinition(), LIMIT, passage)).toEqual({
      value: 2.9,
      severity: 'IL',
      sensor: 'A1',
      micros: passage.peak.micros,
    });
    const timeless = { ...passage, peak: { ...passage.peak, micros: null } };
    expect(recordOfLimit(aDefinition(), LIMIT, timeless)).toMatchObject({ micros: passage.phases.onMicros });
  });

  test('else the largest usable deck channel', () => {
    const passage = ofChannels(aPassage({ peaks: { A1: 2.3, A2: 9, A3: 9.5, T1: 99, X9: 99 } }));
    const channels = passage.channels.map((channel) => {
      if (channel.sensor === 'A2') return { ...channel, bandPeak: measured(9, 1, 'poor', 'clipped') };
      if (channel.sensor === 'A3') return { ...channel, bandPeak: notMeasurable('a gap') };
      return { ...channel, bandPeakMicros: null };
    });
    expect(recordOfLimit(aDefinition(), LIMIT, { ...passage, channels })).toEqual({
      value: 2.3,
      severity: 'AL',
      sensor: 'A1',
      micros: DAWN,
    });
  });

  test('has a reason where there is none', () => {
    const none = aPassage({ peaks: {} });
    expect(recordOfLimit(aDefinition(), LIMIT, none)).toEqual({ value: null, reason: 'not asked for' });
    const strain = ofChannels(aPassage({ peaks: { T1: 3 } }));
    expect(recordOfLimit(aDefinition(), LIMIT, strain)).toEqual({ value: null, reason: 'no usable deck channel' });
  });
});

test('the gravest live severity is read from the steps, and live saw nothing where it has no value', () => {
  const alarm = anAlarm(DAWN, 'AL');
  const steps = [...alarm.steps, { ...alarm.steps[0]!, what: 'escalated' as const, severity: 'IL' as const }];
  expect(liveSeverity({ ...alarm, steps, severity: 'IAL' })).toBe('IL');
  expect(liveSeverity({ ...alarm, liveValue: null })).toBeNull();
});

describe('doubt from the record', () => {
  test('is not cast on a sensor that the definition no longer has, nor without neighbours', () => {
    const passage = aPassage({ peaks: { A1: 3, A2: 0.1 } });
    const gone = anAlarm(DAWN, 'AL', { sensor: 'Z9' });
    expect(recordDoubt(aDefinition(), gone, passage)).toBe(gone);
    expect(recordDoubt(aDefinition(), anAlarm(), aPassage({ peaks: { A1: 3, A4: 0.1 } })).doubt).toBeNull();
  });

  test('compares with what live saw where the channel is not in the record or has no usable peak', () => {
    const doubt = 'its neighbours did not feel it, the most was 0.60 m/s² at A2';
    expect(recordDoubt(aDefinition(), anAlarm(), aPassage({ peaks: { A2: 0.6 } })).doubt).toBe(doubt);
    const unusable = aPassage({ peaks: { A1: 3, A2: 0.6 } });
    const channels = unusable.channels.map((c) => (c.sensor === 'A1' ? { ...c, bandPeak: notMeasurable('x') } : c));
    expect(recordDoubt(aDefinition(), anAlarm(), { ...unusable, channels }).doubt).toBe(doubt);
    const recordOnly = anAlarm(DAWN, 'AL', { liveValue: null });
    expect(recordDoubt(aDefinition(), recordOnly, aPassage({ peaks: { A1: 2.4, A2: 0.6 } })).doubt).toBeNull();
    expect(recordDoubt(aDefinition(), recordOnly, aPassage({ peaks: { A1: 2.41, A2: 0.6 } })).doubt).toBe(doubt);
  });
});

describe('the sentence', () => {
  test('does without what is not known: sensor, limit, level', () => {
    const bare = anAlarm(DAWN, 'IL', { sensor: null, sensors: [] });
    expect(levelMessage(aDefinition({ limits: [] }), bare)).toBe(
      'Ottermere Trough: deck acceleration 2.50 m/s² is above the intervention limit; ' +
        'advisory: a reason to look, without authority over train movement.',
    );
    const below = { ...anAlarm(DAWN, 'AL'), liveValue: 2 };
    expect(levelMessage(aDefinition(), below)).toContain('(AL, limit ballast)');
    const empty = anAlarm(DAWN, 'AL', { liveValue: null, recordValue: null });
    expect(levelMessage(aDefinition(), empty)).toContain('the record finds a deck acceleration of 0.00 m/s² at A1');
  });
});
