import { describe, expect, test } from 'vitest';
import { recordDoubt } from '#core/alarm/doubt.ts';
import { liveSeverity, recordOfLimit } from '#core/alarm/record.ts';
import { nextAll, openDesk } from '#core/alarm/desk.ts';
import { levelMessage } from '#core/alarm/wording.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import { measured, notMeasurable, type Measured } from '#core/contract/measure.ts';
import type { ChannelMeasures, Passage } from '#core/contract/passage.ts';
import { aDefinition, aPassage, anAlarm, DAWN } from '../../support/specimen.ts';

const LIMIT = aDefinition().limits[0]!;
const SLAB = { ...LIMIT, id: 'slab', levels: { AL: 4 } };
const MISSING = 'lower bound: samples are missing while the train was there; sensor: gap';

/** The passage with another peak of one channel against a limit, which its other limits do not share. */
function withPeak(passage: Passage, sensor: string, peak: Measured, over: Partial<ChannelMeasures> = {}): Passage {
  const channels = passage.channels.map((channel) =>
    channel.sensor === sensor
      ? { ...channel, ...over, limits: channel.limits.map((limit) => ({ ...limit, peak })) }
      : channel,
  );
  return { ...passage, channels };
}

describe('the record for a limit', () => {
  test('is the largest usable deck channel', () => {
    const passage = aPassage({ peaks: { A1: 2.3, A2: 9, A3: 9.5, T1: 99, X9: 99 } });
    const spoilt = withPeak(
      withPeak(passage, 'A2', measured(9, 1, 'poor', 'sensor: spike'), { flags: ['spike'] }),
      'A3',
      notMeasurable('a gap'),
    );
    expect(recordOfLimit(aDefinition(), LIMIT, spoilt)).toEqual({
      value: 2.3,
      severity: 'AL',
      sensor: 'A1',
      micros: DAWN + 7_000_000,
      standing: 'whole',
    });
  });

  test('is judged in the band of that limit, not in the band of the first', () => {
    // 2.5 m/s² up to 45 Hz, 4.2 m/s² up to 80 Hz.
    const passage = aPassage({ peaks: { A1: 2.5 } });
    const wide = { ...passage.channels[0]!.limits[0]!, limit: 'slab', upToHz: 80, peak: measured(4.2, 0.01) };
    const channels = passage.channels.map((channel) => ({ ...channel, limits: [...channel.limits, wide] }));
    const definition = aDefinition({ limits: [LIMIT, SLAB] });
    const both = [LIMIT, SLAB].map((limit) => recordOfLimit(definition, limit, { ...passage, channels }));
    expect(both).toMatchObject([
      { value: 2.5, severity: 'AL' },
      { value: 4.2, severity: 'AL' },
    ]);
  });

  test('is of the moment the train came where a peak has no time', () => {
    const passage = aPassage({ peaks: { A1: 2.3 } });
    const limits = passage.channels[0]!.limits.map((limit) => ({ ...limit, micros: null }));
    const timeless = { ...passage, channels: [{ ...passage.channels[0]!, limits }] };
    expect(recordOfLimit(aDefinition(), LIMIT, timeless)).toMatchObject({ micros: DAWN });
  });

  test('may be a lower bound, but not one of a sensor that cannot be trusted', () => {
    const passage = aPassage({ peaks: { A1: 3.0, A2: 2.4 } });
    const bound = measured(3.0, 0.01, 'poor', MISSING);
    expect(recordOfLimit(aDefinition(), LIMIT, withPeak(passage, 'A1', bound, { flags: ['gap'] }))).toMatchObject({
      value: 3.0,
      standing: 'lower bound',
    });
    expect(
      recordOfLimit(aDefinition(), LIMIT, withPeak(passage, 'A1', bound, { flags: ['gap', 'spike'] })),
    ).toMatchObject({ value: 2.4, standing: 'whole' });
  });

  test('is doubtful where no channel may be trusted', () => {
    const passage = withPeak(aPassage({ peaks: { A1: 3.0 } }), 'A1', measured(3.0, 0.01, 'poor', 'sensor: spike'), {
      flags: ['spike'],
    });
    expect(recordOfLimit(aDefinition(), LIMIT, passage)).toMatchObject({ value: 3.0, standing: 'doubtful' });
  });

  test('has a reason where there is none', () => {
    const none = aPassage({ peaks: {} });
    expect(recordOfLimit(aDefinition(), LIMIT, none)).toEqual({ value: null, reason: 'not asked for' });
    const strain = aPassage({ peaks: { T1: 3 } });
    expect(recordOfLimit(aDefinition(), LIMIT, strain)).toEqual({ value: null, reason: 'no usable deck channel' });
    const elsewhere = { ...aPassage(), channels: aPassage().channels.map((channel) => ({ ...channel, limits: [] })) };
    expect(recordOfLimit(aDefinition(), LIMIT, elsewhere)).toMatchObject({ value: null });
  });
});

/** The live alarm of IL at A1, 2.9 m/s², once the record has come. */
function judgedBy(passage: Passage, over: Partial<Alarm> = {}): Alarm {
  const live = anAlarm(DAWN, 'IL', { liveValue: 2.9, passage: passage.id, returnedMicros: DAWN + 8_000_000, ...over });
  const alarm: Alarm = { ...live, state: 'returned to normal, unacknowledged' };
  const desk = openDesk({ definition: aDefinition(), alarms: [alarm], nowMicros: DAWN });
  return nextAll(desk, [{ kind: 'passage', passage }], DAWN).state.alarms[alarm.id]!;
}

describe('a record with holes', () => {
  const hole = (value: number): Passage =>
    withPeak(aPassage({ peaks: { A1: value, A2: 2.0 } }), 'A1', measured(value, 0.01, 'poor', MISSING), {
      flags: ['gap'],
    });

  test('takes nothing back: the live value stands', () => {
    const alarm = judgedBy(hole(2.1));
    expect(alarm).toMatchObject({ verdict: 'inconclusive', recordValue: null, severity: 'IL', liveValue: 2.9 });
    expect(alarm.message).toContain(
      'the record is incomplete at A1 (the most it holds is 2.10 m/s² at A1): the live value stands',
    );
    expect(alarm.steps.at(-1)).toMatchObject({ what: 'inconclusive', micros: DAWN + 15_000_000 });
  });

  test('takes nothing back where the other channels are whole, nor where the sensor is not in it at all', () => {
    const others = judgedBy(hole(1.2));
    expect(others).toMatchObject({ verdict: 'inconclusive', recordValue: null });
    expect(others.message).toContain('the most it holds is 2.00 m/s² at A2');
    expect(judgedBy(aPassage({ peaks: { A2: 2.0 } })).verdict).toBe('inconclusive');
    expect(judgedBy(hole(1.2), { sensor: 'A2', sensors: ['A2'] }).verdict).toBe('corrected');
  });

  test('still confirms what it reaches, and corrects upwards, as a lower bound', () => {
    const same = judgedBy(hole(2.85));
    expect(same).toMatchObject({ verdict: 'confirmed', recordValue: 2.85, recordAtLeast: true });
    expect(same.message).toContain('the record confirms IL with at least 2.85 m/s²');
    const graver = judgedBy(hole(3.6));
    expect(graver).toMatchObject({ verdict: 'corrected', recordSeverity: 'IAL', severity: 'IAL', recordAtLeast: true });
    expect(judgedBy(aPassage({ peaks: { A1: 2.85 } }))).not.toHaveProperty('recordAtLeast');
  });

  test('raises an alarm that says it is a lower bound', () => {
    const desk = openDesk({ definition: aDefinition(), nowMicros: DAWN });
    const [alarm] = Object.values(nextAll(desk, [{ kind: 'passage', passage: hole(2.3) }], DAWN).state.alarms);
    expect(alarm).toMatchObject({ liveValue: null, recordValue: 2.3, recordAtLeast: true });
    expect(alarm?.message).toContain('the record finds a deck acceleration of at least 2.30 m/s² at A1');
  });
});

test('a record without a channel to be trusted confirms in doubt, and takes nothing back', () => {
  const spoilt = (value: number): Passage =>
    withPeak(aPassage({ peaks: { A1: value } }), 'A1', measured(value, 0.01, 'poor', 'sensor: spike'), {
      flags: ['spike'],
    });
  expect(judgedBy(spoilt(2.9))).toMatchObject({
    verdict: 'confirmed',
    doubt: 'A1 is marked "spike"; no channel of the record may be trusted',
  });
  const less = judgedBy(spoilt(1.0));
  expect(less).toMatchObject({ verdict: 'inconclusive', recordValue: null, doubt: 'A1 is marked "spike"' });
  expect(less.message).toContain('the record holds no channel that may be trusted (1.00 m/s² at A1)');
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
    const spoilt = withPeak(unusable, 'A1', notMeasurable('x'));
    expect(recordDoubt(aDefinition(), anAlarm(), spoilt).doubt).toBe(doubt);
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
