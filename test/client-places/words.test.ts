import { describe, expect, it } from 'vitest';
import type { Alarm } from '#core/contract/alarm.ts';
import type { PassageView } from '#core/contract/api.ts';
import { measured, notMeasurable } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import {
  againstLimit,
  delayWords,
  isAtLeast,
  needsAnswer,
  recordWords,
  sensorOf,
  stepWords,
  subjectOf,
  valueOf,
} from '../../client/charts/alarm-words.ts';
import { bare, KINDS, uncertainty, valueText, withUnit } from '../../client/charts/figure.ts';
import { orderWords, timeOf, titleOf, towards, unlikeWords, verdictOf } from '../../client/charts/passage-words.ts';
import { csvOf } from '../../client/charts/table.ts';
import { trustOf } from '../../client/charts/trust.ts';
import { bridge, passageOf } from './passage.ts';

const alarm = (changes: Partial<Alarm> = {}): Alarm => ({
  id: 'a',
  bridge: 'b',
  kind: 'level',
  rule: 'deck',
  state: 'unacknowledged',
  severity: 'IL',
  raisedMicros: 1_790_000_000_000_000,
  liveValue: 2.85,
  sensor: 'A1',
  sensors: ['A1'],
  recordValue: null,
  recordSeverity: null,
  verdict: null,
  doubt: null,
  passage: null,
  passagesAboveInDay: 0,
  returnedMicros: null,
  acknowledged: null,
  steps: [],
  message: 'm',
  ...changes,
});

const view = (changes: Partial<PassageView> = {}): PassageView => ({
  passage: passageOf({ peak: 2.9 }),
  definition: bridge,
  earlier: null,
  later: null,
  alarms: [],
  alike: [],
  hasWaveform: true,
  ...changes,
});

describe('a measured value in print', () => {
  it('carries 1.96 standard errors, in the digits of its kind', () => {
    expect(uncertainty(measured(2.94, 0.0153), KINDS.acceleration)).toBe('± 0.03');
    expect(uncertainty(measured(0.0132, 0.0009), KINDS.damping)).toBe('± 0.2');
  });

  it('has an uncertainty to the place of its own last digit: a smaller one is rounded up to that, never to zero', () => {
    expect(uncertainty(measured(5.1, 0.001), KINDS.frequency)).toBe('± 0.01');
    expect(uncertainty(measured(5.1, 0.02), KINDS.frequency)).toBe('± 0.04');
  });

  it('and its uncertainty have fewer digits where that has more than two significant ones', () => {
    const coarse = measured(12.345, 0.6, 'usable', 'x');
    expect(valueText(coarse, KINDS.frequency)).toBe('12.3\u00a0Hz');
    expect(uncertainty(coarse, KINDS.frequency)).toBe('± 1.2');
    expect(uncertainty(measured(40, 7), KINDS.speed)).toBe('± 14');
    expect(valueText(measured(40.4, 7), KINDS.speed)).toBe('40\u00a0m/s');
  });

  it('is never printed finer than 0.995 of the next place allows: 0.996 is 1.0', () => {
    expect(uncertainty(measured(5, 0.996 / 1.96), KINDS.frequency)).toBe('± 1.0');
    expect(uncertainty(measured(5, 0.994 / 1.96), KINDS.frequency)).toBe('± 0.99');
  });

  it('that is a lower bound says so, and has no uncertainty', () => {
    const bound = measured(2.03, 0.01, 'poor', 'lower bound: samples are missing while the train was there');
    expect(valueText(bound, KINDS.acceleration)).toBe('≥\u00a02.03\u00a0m/s²');
    expect(uncertainty(bound, KINDS.acceleration)).toBe('');
    expect(bare(bound, 2)).toBe('≥\u00a02.03');
    expect(bare(notMeasurable('too short'), 2)).toBe('n. m.');
    expect(valueText(measured(2.03, 0.01), KINDS.acceleration)).toBe('2.03\u00a0m/s²');
    expect(valueText(notMeasurable('too short'), KINDS.acceleration)).toBe('not measurable');
  });

  it('says nothing where no error can be given, and nothing is measured', () => {
    expect(uncertainty(measured(5.1, null), KINDS.frequency)).toBe('');
    expect(uncertainty(notMeasurable('too short'), KINDS.frequency)).toBe('');
  });

  it('has its unit', () => {
    expect(withUnit(0.0132, KINDS.damping)).toBe('1.3\u00a0%');
    expect(withUnit(-1.44, KINDS.temperature)).toBe('\u22121.4\u00a0°C');
  });
});

describe('a passage in words', () => {
  it('says what crossed, when, and where to', () => {
    const passage = passageOf({ speedMs: 44.26 });
    expect(titleOf(passage)).toBe('2 axles, 44.3 m/s');
    expect(titleOf({ ...passage, axleCount: measured(1, null) })).toBe('1 axle, 44.3 m/s');
    const cut = measured(8, null, 'poor', 'lower bound: the recording ends under the train');
    expect(titleOf({ ...passage, axleCount: cut })).toBe('≥\u00a08 axles, 44.3 m/s');
    expect(towards(passage, bridge)).toBe('towards km 10.010');
    expect(towards({ ...passage, direction: 'falling' }, bridge)).toBe('towards km 9.990');
    expect(timeOf(passage, 'Europe/Berlin')).toBe('Mon 21 Sep 2026, 16:13:22 local (UTC+2), 14:13:22 UTC');
  });

  it('says what is not measurable instead of leaving it out', () => {
    const passage = { ...passageOf({}), speedMs: notMeasurable('x'), axleCount: notMeasurable('x'), direction: null };
    expect(titleOf(passage)).toBe('Train, axles not counted, speed not measurable');
    expect(towards(passage, bridge)).toBe('direction not measurable');
  });

  it('calls no train what was not recognised as one', () => {
    const { phases, ...passage } = passageOf({});
    expect(titleOf({ ...passage, phases: { ...phases, foundBy: 'live level' } })).toBe(
      'A level passed, no train recognised',
    );
  });

  it('never says "below all limits" where no limit holds or nothing was measured', () => {
    const passage = passageOf({});
    expect(verdictOf(passage)).toBe('Below all limits');
    expect(verdictOf({ ...passage, peak: { ...passage.peak, ofGravest: null } })).toBe('No limit holds here');
    const bound = measured(1.1, null, 'poor', 'lower bound: the recording stops 0.02 s after the last axle');
    expect(verdictOf({ ...passage, peak: { ...passage.peak, measured: bound } })).toMatch(/^Not known to be below/);
    const blind = { ...passage.peak, measured: notMeasurable('all deck channels are dead') };
    expect(verdictOf({ ...passage, peak: blind })).toContain('not measurable: all deck channels are dead');
  });
});

describe('two passages that are compared', () => {
  const viewOf = (passage: Passage): PassageView => ({
    passage,
    definition: bridge,
    hasWaveform: true,
    earlier: null,
    later: null,
    alike: [],
    alarms: [],
  });

  it('say which came first, whatever was opened first', () => {
    const here = passageOf({});
    const later = { ...here, phases: { ...here.phases, onMicros: here.phases.onMicros + 1 } };
    expect(orderWords(here, later)).toBe('a later passage');
    expect(orderWords(later, here)).toBe('an earlier passage');
  });

  it('are unlike where as many axles stood at other distances', () => {
    const here = passageOf({});
    const moved = (byM: number): Passage => ({
      ...here,
      axles: here.axles.map((axle, i) => ({ ...axle, behindFirstM: axle.behindFirstM + (i > 0 ? byM : 0) })),
    });
    expect(unlikeWords(viewOf(here), viewOf(moved(0.3)))).toEqual([]);
    expect(unlikeWords(viewOf(here), viewOf(moved(2)))).toEqual(['its axles stood at other distances']);
  });

  it('say what makes them unlike, and nothing where they are alike', () => {
    const here = passageOf({ speedMs: 44.26 });
    expect(unlikeWords(viewOf(here), viewOf(passageOf({ speedMs: 40 })))).toEqual([]);
    const other: Passage = {
      ...here,
      bridge: 'other',
      direction: here.direction === 'rising' ? 'falling' : 'rising',
      axleCount: measured(99, 0),
      provenance: { ...here.provenance, ruleVersion: 'older' },
    };
    const words = unlikeWords(viewOf(here), { ...viewOf(other), definition: { ...bridge, name: 'Other Bridge' } });
    expect(words).toEqual([
      'it crossed another bridge, Other Bridge',
      'it went the other way',
      'it had another number of axles',
      'it was computed with rules older',
    ]);
  });
});

describe('an alarm in words', () => {
  it('calls no lower bound below a limit', () => {
    const { levels } = bridge.limits[0]!;
    const bound = alarm({ recordValue: 2.7, recordAtLeast: true });
    expect(isAtLeast(bound)).toBe(true);
    expect(againstLimit(bound, levels)).toBe('not known to be below IL 2.80');
    expect(againstLimit({ ...bound, recordValue: 2.92 }, levels)).toBe('0.12 above IL 2.80');
    expect(isAtLeast({ ...bound, recordValue: null })).toBe(false);
  });

  it('names the sensor whose value it tells: of the record once that is known', () => {
    const step = { micros: 1, takenMicros: 1, severity: null, value: 2.9, by: null, note: null };
    const judged = alarm({ sensor: 'A4', recordValue: 2.9, steps: [{ ...step, what: 'confirmed', sensor: 'A3' }] });
    expect(sensorOf(judged)).toBe('A3');
    expect(sensorOf({ ...judged, recordValue: null })).toBe('A4');
    expect(sensorOf(alarm({ sensor: 'A4', recordValue: 2.9, steps: [] }))).toBe('A4');
  });

  it('is told by the value of the record once that is known', () => {
    expect(valueOf(alarm())).toBe(2.85);
    expect(valueOf(alarm({ recordValue: 2.92 }))).toBe(2.92);
    expect(againstLimit(alarm({ recordValue: 2.92 }), bridge.limits[0]!.levels)).toBe('0.12 above IL 2.80');
    expect(againstLimit(alarm({ recordValue: 2.7 }), bridge.limits[0]!.levels)).toBe('0.10 below IL 2.80');
  });

  it('needs an answer until it is acknowledged, also after it has returned to normal', () => {
    expect(needsAnswer(alarm({ state: 'returned to normal, unacknowledged' }))).toBe(true);
    expect(needsAnswer(alarm({ state: 'acknowledged' }))).toBe(false);
    expect(needsAnswer(alarm({ state: 'normal' }))).toBe(false);
  });

  it('names what it is about', () => {
    expect(subjectOf(alarm({ kind: 'no data', rule: 'L-1' }))).toBe('no data from logger L-1');
    expect(subjectOf(alarm({ kind: 'sensor', rule: 'A2' }))).toBe('sensor A2 not to be trusted');
  });

  it('tells each step, and how long the server took', () => {
    const step = {
      micros: 1e15,
      takenMicros: 1e15 + 320_000,
      severity: 'IL' as const,
      value: 2.85,
      sensor: 'A1',
      by: null,
      note: null,
    };
    expect(stepWords({ ...step, what: 'raised' })).toBe('raised, IL 2.85 m/s² on A1');
    expect(delayWords({ ...step, what: 'raised' })).toBe('taken 0.3 s later');
    expect(stepWords({ ...step, what: 'corrected', severity: null, value: 2.1 })).toBe(
      'corrected by the record: below all limits, 2.10 m/s² on A1',
    );
    const answer = {
      ...step,
      what: 'acknowledged' as const,
      by: 'K. Ansel',
      note: 'told desk 2',
      severity: null,
      value: null,
      sensor: null,
    };
    expect(stepWords(answer)).toBe('acknowledged by K. Ansel: told desk 2');
  });

  it("tells a fault of a sensor from one of its logger's clock", () => {
    const raised = (note: string) => {
      const at = { micros: 0, takenMicros: 0, severity: 'AL' as const, value: null, sensor: 'A1', by: null };
      return { what: 'raised' as const, note, ...at };
    };
    const faulty = (...notes: string[]) => alarm({ kind: 'sensor', rule: 'A1', steps: notes.map(raised) });
    expect(subjectOf(faulty('clock step (back)'))).toBe('clock of the logger of A1 not to be trusted');
    expect(subjectOf(faulty('clock step (back)', 'flat (seen)'))).toBe('sensor A1 not to be trusted');
    expect(stepWords(raised('flat (seen)'))).toBe('raised, AL on A1: flat (seen)');
  });
});

describe('what the record made of an alarm', () => {
  const judged = (changes: Partial<Alarm>) => recordWords(alarm(changes));

  it('is not known before the record is, and a value with its meaning then', () => {
    expect(judged({})).toMatchObject({ value: 'not known yet' });
    expect(judged({ verdict: 'confirmed', recordValue: 2.9, recordSeverity: 'IL' })).toEqual({
      brief: 'confirmed by the record',
      value: '2.90 m/s²',
      meaning: 'confirms the alarm',
    });
    expect(judged({ verdict: 'corrected', recordValue: 3.6, recordSeverity: 'IAL', recordAtLeast: true })).toEqual({
      brief: 'the record finds it above IAL',
      value: 'at least 3.60 m/s²',
      meaning: 'corrects it: above IAL',
    });
    expect(judged({ verdict: 'corrected', recordValue: 1.6 }).brief).toBe('the record finds it below all limits');
  });

  it('says why there is none, and that the live value stands', () => {
    const step = {
      what: 'inconclusive' as const,
      micros: 0,
      takenMicros: 0,
      severity: null,
      value: null,
      sensor: null,
      by: null,
      note: 'has no value (a gap)',
    };
    const inconclusive = alarm({ verdict: 'inconclusive', steps: [step] });
    expect(recordWords(inconclusive)).toMatchObject({
      value: 'none',
      meaning: 'it has no value (a gap): the live value stands',
    });
    expect(stepWords(step)).toBe('the record has no value (a gap): the live value stands');
    expect(trustOf(inconclusive, null).answer).toBe('with doubt');
    expect(judged({ verdict: 'no passage' })).toMatchObject({
      brief: 'live value, no train was recognised',
      value: 'none',
    });
    expect(trustOf(alarm({ verdict: 'no passage' }), null).answer).toBe('with doubt');
  });
});

describe('whether the sensor is to be trusted', () => {
  it('is not known before the passage is', () => {
    expect(trustOf(alarm(), null).answer).toBe('not known yet');
  });

  it('is yes when its neighbour felt it too and nothing was wrong with it', () => {
    const trust = trustOf(alarm({ verdict: 'confirmed' }), view());
    expect(trust.answer).toBe('yes');
    expect(trust.reasons.map(({ words }) => words)).toContain('A2, at the same place, read 2.61 m/s², 10 % less');
  });

  it('is in doubt when the neighbour felt nothing, a condition was met, or the record corrects it', () => {
    const passage = passageOf({ peak: 2.9 });
    const quiet = passage.channels.map((channel) =>
      channel.sensor === 'A2' ? { ...channel, bandPeak: measured(0.2, 0.01) } : channel,
    );
    const clipped = passage.channels.map((channel) =>
      channel.sensor === 'A1' ? { ...channel, flags: ['clipped'] } : channel,
    );
    expect(trustOf(alarm(), view({ passage: { ...passage, channels: quiet } })).answer).toBe('with doubt');
    expect(trustOf(alarm(), view({ passage: { ...passage, channels: clipped } })).answer).toBe('with doubt');
    expect(trustOf(alarm({ verdict: 'corrected' }), view()).answer).toBe('with doubt');
    expect(trustOf(alarm({ doubt: 'its neighbour did not feel it' }), null).answer).toBe('with doubt');
  });
});

describe('a table as CSV', () => {
  it('follows RFC 4180: quotes doubled, CRLF, an empty field for a missing value', () => {
    expect(
      csvOf({
        columns: ['t, s', 'note'],
        rows: [
          [0.5, 'said "no"'],
          [1, null],
        ],
      }),
    ).toBe('"t, s",note\r\n0.5,"said ""no"""\r\n1,\r\n');
  });

  it('keeps a note from running as a formula in a spreadsheet', () => {
    expect(csvOf({ columns: ['note'], rows: [['=1+1'], [-2.5]] })).toBe("note\r\n'=1+1\r\n-2.5\r\n");
  });
});
