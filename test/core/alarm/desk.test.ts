import { describe, expect, test } from 'vitest';
import { next, nextAll, openDesk } from '#core/alarm/desk.ts';
import { MAX_STEPS } from '#core/alarm/life.ts';
import type { DeskEffect, DeskEvent, DeskState } from '#core/alarm/state.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import type { Severity } from '#core/contract/severity.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { aDefinition, aPassage, anAlarm, DAWN } from '../../support/specimen.ts';

const S = MICROS_PER_SECOND;
const PASSAGE = aPassage().id;

const passed = (sensor: string, severity: Severity, value: number, micros: Micros, limit = 'ballast'): DeskEvent => ({
  kind: 'level',
  level: { bridge: 'ottermere', sensor, limit, kind: 'passed', severity, micros, value },
});
const returned = (sensor: string, micros: Micros, limit = 'ballast'): DeskEvent => ({
  kind: 'level',
  level: { bridge: 'ottermere', sensor, limit, kind: 'returned', severity: 'AL', micros, value: 0.1 },
});
const progress = (kind: 'entered' | 'left' | 'discarded', micros: Micros, passage = PASSAGE): DeskEvent => ({
  kind: 'progress',
  progress: { bridge: 'ottermere', passage, kind, micros },
});
const condition = (
  sensor: string,
  code: 'silent' | 'spike' | 'flat' | 'clock step',
  state: 'began' | 'happened' | 'ended',
  micros: Micros,
  detail = 'seen',
): DeskEvent => ({
  kind: 'condition',
  condition: { bridge: 'ottermere', sensor, code, state, micros, detail },
});
const settled = (micros: Micros): DeskEvent => ({ kind: 'settled', bridge: 'ottermere', micros });
const acknowledge = (alarm: string): DeskEvent => ({ kind: 'acknowledge', alarm, by: 'R. Fenn', note: 'looked at it' });

const fresh = (alarms: Alarm[] = []): DeskState => openDesk({ definition: aDefinition(), alarms, nowMicros: DAWN });
const alarmsOf = (state: DeskState): Alarm[] => Object.values(state.alarms);
function only(state: DeskState): Alarm {
  const [alarm, ...others] = alarmsOf(state);
  expect(others).toEqual([]);
  if (alarm === undefined) throw new Error('no alarm');
  return alarm;
}
const run = (events: DeskEvent[], from = fresh()): DeskState => nextAll(from, events, DAWN + S).state;
const whats = (alarm: Alarm): string[] => alarm.steps.map(({ what }) => what);

describe('a level alarm', () => {
  test('is one a passage and limit, whatever number of channels pass and however grave it grows', () => {
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.21, DAWN + S),
      passed('A2', 'AL', 2.3, DAWN + 1.1 * S),
      passed('A1', 'IL', 2.85, DAWN + 2 * S),
      passed('A3', 'AL', 2.25, DAWN + 2.1 * S),
      passed('A1', 'IAL', 3.6, DAWN + 3 * S),
    ]);
    expect(only(state)).toMatchObject({
      id: 'ottermere-ballast-20261201-051234-2',
      state: 'unacknowledged',
      severity: 'IAL',
      liveValue: 3.6,
      sensor: 'A1',
      sensors: ['A1', 'A2', 'A3'],
      passage: PASSAGE,
      raisedMicros: DAWN + S,
    });
    expect(whats(only(state))).toEqual(['raised', 'escalated', 'escalated']);
  });

  test('returns only when every channel has come back', () => {
    const two = run([passed('A1', 'AL', 2.3, DAWN), passed('A2', 'AL', 2.4, DAWN + 1), returned('A1', DAWN + 2 * S)]);
    expect(only(two)).toMatchObject({ state: 'unacknowledged', returnedMicros: null });
    const none = run([returned('A2', DAWN + 3 * S)], two);
    expect(only(none)).toMatchObject({ state: 'returned to normal, unacknowledged', returnedMicros: DAWN + 3 * S });
  });

  test('is joined by a second excursion in the same passage', () => {
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.3, DAWN + S),
      returned('A1', DAWN + 4 * S),
      passed('A1', 'IL', 2.9, DAWN + 6 * S),
    ]);
    expect(only(state)).toMatchObject({ state: 'unacknowledged', severity: 'IL', returnedMicros: null });
    expect(whats(only(state))).toEqual(['raised', 'returned', 'raised', 'escalated']);
  });

  test('raised before the detector spoke belongs to the train that it then finds', () => {
    const state = run([
      passed('A1', 'AL', 2.3, DAWN - S),
      progress('entered', DAWN),
      passed('A2', 'AL', 2.4, DAWN + S),
    ]);
    expect(only(state)).toMatchObject({ passage: PASSAGE, sensors: ['A1', 'A2'] });
  });

  test('of a next train is another one, and ends what an earlier train left open', () => {
    const later = DAWN + 600 * S;
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.3, DAWN + S),
      progress('entered', later, 'ottermere-next'),
      passed('A1', 'AL', 2.5, later + S),
    ]);
    expect(alarmsOf(state).map((alarm) => [alarm.passage, alarm.state])).toEqual([
      [PASSAGE, 'returned to normal, unacknowledged'],
      ['ottermere-next', 'unacknowledged'],
    ]);
  });

  test('of a train just before goes on ringing while the next one enters, and each ends with its channels', () => {
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.3, DAWN + S),
      progress('left', DAWN + 6 * S),
      progress('entered', DAWN + 9 * S, 'ottermere-next'),
      passed('A2', 'IL', 2.9, DAWN + 10 * S),
    ]);
    expect(alarmsOf(state).map(({ passage, state: now }) => [passage, now])).toEqual([
      [PASSAGE, 'unacknowledged'],
      ['ottermere-next', 'unacknowledged'],
    ]);
    const over = run([returned('A1', DAWN + 11 * S), returned('A2', DAWN + 12 * S)], state);
    expect(alarmsOf(over).map(({ returnedMicros }) => returnedMicros)).toEqual([DAWN + 11 * S, DAWN + 12 * S]);
  });

  test('without a train says so when it is over and no passage can include it any more', () => {
    const over = run([passed('A1', 'AL', 2.3, DAWN), returned('A1', DAWN + S), settled(DAWN + S)]);
    expect(only(over)).toMatchObject({ verdict: null, doubt: null });
    const state = run([settled(DAWN + 3 * S)], over);
    expect(only(state)).toMatchObject({ verdict: 'no passage', passage: null, doubt: 'no other sensor passed' });
    expect(only(state).message).toContain('no train was recognised and no record was made: the live value stands');
    expect(only(state).steps.at(-1)).toMatchObject({ what: 'no passage', micros: DAWN + S });
    expect(run([settled(DAWN + 9 * S)], state).alarms).toEqual(state.alarms);
    const two = run([passed('A1', 'AL', 2.3, DAWN), passed('A2', 'AL', 2.4, DAWN), settled(DAWN + 60 * S)]);
    expect(only(two).verdict).toBeNull();
    const both = run([returned('A1', DAWN + S), returned('A2', DAWN + S), settled(DAWN + 70 * S)], two);
    expect(only(both)).toMatchObject({ verdict: 'no passage', doubt: null });
  });

  test('says so after a restart too, and where the time of the bridge went back it waits', () => {
    const stored = run([passed('A1', 'AL', 2.3, DAWN), returned('A1', DAWN + S)]);
    const again = run([settled(DAWN - 60 * S), settled(DAWN + 60 * S)], fresh(alarmsOf(stored)));
    expect(only(again).verdict).toBe('no passage');
    const earlier = DAWN - 600 * S;
    const back = run(
      [settled(DAWN + 60 * S), settled(earlier), passed('A1', 'AL', 2.3, earlier), returned('A1', earlier + 11 * S)],
      fresh(),
    );
    expect(only(back).verdict).toBeNull();
    expect(only(run([settled(earlier + 20 * S)], back)).verdict).toBe('no passage');
  });

  test('is judged by the record of a train that is found after all', () => {
    const state = run([
      passed('A1', 'AL', 2.3, DAWN),
      returned('A1', DAWN + S),
      settled(DAWN + 30 * S),
      { kind: 'passage', passage: aPassage({ peaks: { A1: 2.4, A2: 2.1 } }) },
    ]);
    expect(only(state)).toMatchObject({ doubt: null, passage: PASSAGE, verdict: 'confirmed' });
    expect(whats(only(state))).toEqual(['raised', 'returned', 'no passage', 'confirmed']);
  });

  test('says when the record of its train was never made', () => {
    const events = [progress('entered', DAWN), passed('A1', 'AL', 2.3, DAWN + S), returned('A1', DAWN + 12 * S)];
    const lost = only(run([...events, settled(DAWN + 60 * S)]));
    expect(lost).toMatchObject({ verdict: 'inconclusive', passage: null });
    expect(lost.message).toContain(`the record of ${PASSAGE} was not made: the live value stands`);
  });

  test('of samples that came after the record of their train was made does not deny the train', () => {
    const state = run([
      { kind: 'passage', passage: aPassage() },
      passed('A1', 'AL', 2.3, DAWN + S),
      returned('A1', DAWN + 12 * S),
      settled(DAWN + 60 * S),
    ]);
    expect(only(state).verdict).toBe('inconclusive');
    expect(only(state).message).toContain('the record was made before these samples came: the live value stands');
  });

  test('of a passage that is discarded stays, without passage and in doubt', () => {
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.3, DAWN + S),
      progress('discarded', DAWN + 2 * S),
    ]);
    expect(only(state)).toMatchObject({ passage: null, verdict: 'no passage', doubt: 'no other sensor passed' });
    expect(state.passage).toBeNull();
    expect(only(run([passed('A2', 'AL', 2.3, DAWN + 3 * S)], state))).toMatchObject({ doubt: null, passage: null });
  });

  test('is not joined by what passes long after its train has left', () => {
    const state = run([
      progress('entered', DAWN),
      passed('A1', 'AL', 2.3, DAWN + S),
      returned('A1', DAWN + 5 * S),
      progress('left', DAWN + 6 * S),
      passed('A1', 'AL', 2.3, DAWN + 60 * S),
    ]);
    expect(alarmsOf(state)).toHaveLength(2);
    expect(alarmsOf(state)[1]?.passage).toBeNull();
  });

  test('names bridge, span, value, limit, excess and sensor in one sentence and claims no authority', () => {
    const state = run([passed('A1', 'IL', 3.08, DAWN)]);
    // 3.08 − 2.80 = 0.28, which is 10.0 % of 2.80.
    expect(only(state).message).toBe(
      'Ottermere Trough, span main: deck acceleration 3.08 m/s² at A1 is 0.28 m/s² (10.0 %) above the intervention limit ' +
        'of 2.80 m/s² (IL, limit ballast); advisory: a reason to look, without authority over train movement.',
    );
  });

  test('is marked when its sensor had a condition, before or after', () => {
    const before = run([condition('A1', 'spike', 'happened', DAWN - S), passed('A1', 'AL', 2.3, DAWN)]);
    expect(only(before).doubt).toBe('A1 is marked "spike"');
    const after = run([passed('A1', 'AL', 2.3, DAWN), condition('A1', 'spike', 'happened', DAWN + S)]);
    expect(only(after).doubt).toBe('A1 is marked "spike"');
    const long = run([condition('A1', 'spike', 'began', DAWN - 60 * S), passed('A1', 'AL', 2.3, DAWN)]);
    expect(only(long).doubt).toBeNull();
    const lasting = run([condition('A1', 'flat', 'began', DAWN - 60 * S), passed('A1', 'AL', 2.3, DAWN)]);
    expect(lasting.alarms['ottermere-ballast-20261201-051233-2']?.doubt).toBe('A1 is marked "flat"');
  });

  test('is doubted for the sensor it rests on, not for one that was overtaken', () => {
    const state = run([
      condition('A1', 'spike', 'happened', DAWN),
      passed('A1', 'AL', 2.3, DAWN),
      condition('A2', 'flat', 'began', DAWN),
      condition('A2', 'spike', 'happened', DAWN),
      passed('A2', 'AL', 2.5, DAWN + 1),
    ]);
    expect(state.alarms['ottermere-ballast-20261201-051233-2']?.doubt).toBe(
      'A2 is marked "flat"; A2 is marked "spike"',
    );
  });

  test('counts the passages of the day before that were above the same limit by the record', () => {
    const hour = 3600 * S;
    const earlier = [-30, -20, -10, -1].map((h): DeskEvent => ({
      kind: 'passage',
      passage: aPassage({ onMicros: DAWN + h * hour, peaks: { A1: h === -1 ? 1 : 2.5, A2: 2 } }),
    }));
    const state = run([...earlier, passed('A1', 'AL', 2.3, DAWN)]);
    expect(state.alarms['ottermere-ballast-20261201-051233-2']?.passagesAboveInDay).toBe(2);
  });
});

describe('the record of a passage', () => {
  const live = [progress('entered', DAWN), passed('A1', 'IL', 2.9, DAWN + S), returned('A1', DAWN + 8 * S)];
  const record = (peaks: Record<string, number>, flags = {}): DeskEvent => ({
    kind: 'passage',
    passage: aPassage({ peaks, flags }),
  });

  test('confirms the alarm, and both values are kept', () => {
    const alarm = only(run([...live, record({ A1: 3.0, A2: 2.5 })]));
    expect(alarm).toMatchObject({
      verdict: 'confirmed',
      liveValue: 2.9,
      recordValue: 3.0,
      recordSeverity: 'IL',
      severity: 'IL',
      state: 'returned to normal, unacknowledged',
      returnedMicros: DAWN + 8 * S,
    });
    expect(alarm.message).toContain('the record confirms IL with 3.00 m/s²');
  });

  test('corrects it downwards without lowering what was announced', () => {
    const alarm = only(run([...live, record({ A1: 2.0, A2: 1.5 })]));
    expect(alarm).toMatchObject({ verdict: 'corrected', recordSeverity: null, severity: 'IL', liveValue: 2.9 });
    expect(alarm.message).toContain('the record corrects it to 2.00 m/s² (below all limits)');
  });

  test('corrects it upwards, which asks for a new answer', () => {
    const answered = run([...live, acknowledge('ottermere-ballast-20261201-051234-2')]);
    expect(only(answered).state).toBe('normal');
    const alarm = only(run([record({ A1: 3.7, A2: 3.1 })], answered));
    expect(alarm).toMatchObject({
      verdict: 'corrected',
      severity: 'IAL',
      state: 'returned to normal, unacknowledged',
      acknowledged: null,
    });
    expect(whats(alarm)).toEqual(['raised', 'returned', 'acknowledged', 'corrected']);
  });

  test('lets go of a mark that only live suspected, and adds its own', () => {
    const suspected = run([condition('A1', 'spike', 'happened', DAWN), ...live]);
    expect(only(suspected).doubt).toBe('A1 is marked "spike"');
    expect(only(run([record({ A1: 3.0, A2: 2.5 })], suspected)).doubt).toBeNull();
    expect(only(run([record({ A1: 3.0, A2: 2.5 }, { A1: ['clipped'] })], suspected)).doubt).toBe(
      'A1 is marked "clipped"',
    );
  });

  test('leaves an excursion that still lasts open', () => {
    const alarm = only(
      run([progress('entered', DAWN), passed('A1', 'AL', 2.3, DAWN + S), record({ A1: 2.4, A2: 2.1 })]),
    );
    expect(alarm).toMatchObject({ state: 'unacknowledged', verdict: 'confirmed', returnedMicros: null });
  });

  test('raises the alarm itself where live saw nothing', () => {
    const alarm = only(run([record({ A1: 2.3, A2: 2.1 })]));
    expect(alarm).toMatchObject({
      state: 'returned to normal, unacknowledged',
      severity: 'AL',
      liveValue: null,
      recordValue: 2.3,
      verdict: 'corrected',
      passage: PASSAGE,
      sensor: 'A1',
    });
    expect(alarm.message).toContain('the record finds a deck acceleration of 2.30 m/s² at A1, 0.10 m/s² (4.5 %) above');
  });

  test('below all limits and without an alarm raises none', () => {
    expect(alarmsOf(run([record({ A1: 2.19, A2: 2.1 })]))).toEqual([]);
  });

  test('says when neighbours that should have felt it did not, and leaves out the one beside the bearing', () => {
    const alone = only(run([...live, record({ A1: 3.0, A2: 0.2, A3: 0.3, A4: 0.9 })]));
    expect(alone.doubt).toBe('its neighbours did not feel it, the most was 0.30 m/s² at A3');
    const together = only(run([...live, record({ A1: 3.0, A2: 0.2, A3: 0.75 })]));
    expect(together.doubt).toBeNull();
    const flagged = only(run([...live, record({ A1: 3.0, A2: 2.9 }, { A2: ['flat'], A1: ['clipped'] })]));
    expect(flagged.doubt).toBe('A1 is marked "clipped"');
  });

  test('is held against each limit on the spans that limit holds for', () => {
    const definition = aDefinition({
      spans: [
        { id: 'one', startM: 0, lengthM: 10, structure: 'steel truss', track: 'ballasted' },
        { id: 'two', startM: 10, lengthM: 10, structure: 'steel truss', track: 'direct fastened' },
      ],
      limits: [
        { ...limitOf('ballast'), spans: ['one'] },
        { ...limitOf('slab'), levels: { AL: 4 }, spans: ['two'] },
      ],
    });
    const elsewhere = definition.sensors.map((s) => (s.id === 'A2' ? { ...s, alongM: 15 } : s));
    const desk = openDesk({ definition: { ...definition, sensors: elsewhere }, nowMicros: DAWN });
    const passage = aPassage({ peaks: { A1: 2.5, A2: 4.5, A3: 1 } });
    const channels = passage.channels.map((channel) => ({
      ...channel,
      limits: channel.limits.map((said) => ({ ...said, limit: channel.sensor === 'A2' ? 'slab' : 'ballast' })),
    }));
    const { state } = next(desk, { kind: 'passage', passage: { ...passage, channels } }, DAWN);
    expect(alarmsOf(state).map(({ rule, sensor, recordValue }) => [rule, sensor, recordValue])).toEqual([
      ['ballast', 'A1', 2.5],
      ['slab', 'A2', 4.5],
    ]);
  });

  test('without a usable value says so instead of judging', () => {
    const state = run([...live, record({})]);
    expect(only(state)).toMatchObject({ verdict: 'inconclusive', recordValue: null, passage: PASSAGE, doubt: null });
    expect(only(state).message).toContain('the record has no value (not asked for): the live value stands');
    expect(run([record({})], state).alarms).toEqual(state.alarms);
  });
});

const limitOf = (id: string) => ({ ...aDefinition().limits[0]!, id });

describe('an answer', () => {
  const id = 'ottermere-ballast-20261201-051233-2';

  test('is kept with name, note and time, and is not taken twice', () => {
    const raised = run([passed('A1', 'AL', 2.3, DAWN)]);
    const first = next(raised, acknowledge(id), DAWN + 5 * S);
    expect(only(first.state)).toMatchObject({
      state: 'acknowledged',
      acknowledged: { micros: DAWN + 5 * S, by: 'R. Fenn', note: 'looked at it' },
    });
    const second = next(first.state, acknowledge(id), DAWN + 6 * S);
    expect(second.state).toBe(first.state);
    expect(refusals(second.effects)).toEqual(['ALARM_STATE']);
  });

  test('closes an alarm that is back to normal, and an answered alarm closes when it comes back', () => {
    const over = run([passed('A1', 'AL', 2.3, DAWN), returned('A1', DAWN + S), acknowledge(id)]);
    expect(only(over).state).toBe('normal');
    const answered = run([passed('A1', 'AL', 2.3, DAWN), acknowledge(id), returned('A1', DAWN + S)]);
    expect(only(answered).state).toBe('normal');
    expect(refusals(next(over, acknowledge(id), DAWN).effects)).toEqual(['ALARM_STATE']);
  });

  test('is asked for again when the alarm grows graver, not when it merely goes on', () => {
    const answered = run([progress('entered', DAWN), passed('A1', 'AL', 2.3, DAWN), acknowledge(id)]);
    expect(only(run([passed('A2', 'AL', 2.4, DAWN + S)], answered)).state).toBe('acknowledged');
    const graver = only(run([passed('A2', 'IL', 2.9, DAWN + S)], answered));
    expect(graver).toMatchObject({ state: 'unacknowledged', acknowledged: null });
    expect(graver.steps.find(({ what }) => what === 'acknowledged')?.by).toBe('R. Fenn');
  });

  test('to an unknown alarm is refused, and possible after the alarm was recalled from the store', () => {
    const alarm = anAlarm();
    expect(refusals(next(fresh(), acknowledge(alarm.id), DAWN).effects)).toEqual(['NOT_FOUND']);
    const state = run([{ kind: 'recall', alarm }, acknowledge(alarm.id)]);
    expect(only(state).state).toBe('acknowledged');
  });
});

const refusals = (effects: DeskEffect[]): string[] =>
  effects.flatMap((effect) => (effect.kind === 'refused' ? [effect.complaint.code] : []));

describe('silence of a logger', () => {
  const heard = (at: Micros): DeskEvent => ({ kind: 'heard', logger: 'north', fromMicros: at, toMicros: at + S });
  const tick: DeskEvent = { kind: 'tick' };

  test('is an alarm of its own after silentAfterS, graver after ten times as long, over when data are back', () => {
    const quiet = next(fresh(), heard(DAWN), DAWN + S).state;
    expect(next(quiet, tick, DAWN + 11 * S).state).toBe(quiet);
    const raised = next(quiet, tick, DAWN + 12 * S);
    expect(only(raised.state)).toMatchObject({
      id: 'ottermere-north-20261201-051244-2',
      kind: 'no data',
      rule: 'north',
      severity: 'AL',
      raisedMicros: DAWN + 11 * S,
      liveValue: null,
    });
    expect(raised.effects).toContainEqual({
      kind: 'no data',
      noData: { bridge: 'ottermere', logger: 'north', fromMicros: DAWN + S, toMicros: null },
    });
    expect(next(raised.state, tick, DAWN + 101 * S).effects).toEqual([]);
    const grave = next(raised.state, tick, DAWN + 102 * S);
    expect(only(grave.state).severity).toBe('IL');
    expect(only(raised.state).message).toContain(
      'no data from logger north since 05:12:34 UTC on 2026-12-01, for more than 10 s;',
    );
    expect(only(grave.state).message).toContain('since 05:12:34 UTC on 2026-12-01, for more than 100 s;');
    expect(next(grave.state, tick, DAWN + 5000 * S).effects).toEqual([]);
    const back = next(grave.state, heard(DAWN + 6000 * S), DAWN + 6001 * S);
    expect(only(back.state).state).toBe('returned to normal, unacknowledged');
    expect(back.effects).toContainEqual({
      kind: 'no data',
      noData: { bridge: 'ottermere', logger: 'north', fromMicros: DAWN + S, toMicros: DAWN + 6000 * S },
    });
  });

  test('is noticed after a restart too, where the logger had been heard before it', () => {
    const known = openDesk({ definition: aDefinition(), newest: { north: DAWN - 50 * S }, nowMicros: DAWN });
    expect(only(next(known, tick, DAWN + 11 * S).state).kind).toBe('no data');
    expect(next(fresh(), tick, DAWN + 1000 * S).effects).toEqual([]);
  });

  test('that lasted over a restart goes on as the same alarm', () => {
    const raised = next(next(fresh(), heard(DAWN), DAWN + S).state, tick, DAWN + 12 * S).state;
    const again = openDesk({
      definition: aDefinition(),
      alarms: alarmsOf(raised),
      newest: { north: DAWN + S },
      nowMicros: DAWN + 50 * S,
    });
    expect(next(again, tick, DAWN + 70 * S).effects).toEqual([]);
    expect(only(next(again, tick, DAWN + 102 * S).state).severity).toBe('IL');
  });

  test('lasts 30 s where the definition does not say, and ends as an empty interval where the clock was set back', () => {
    const definition = aDefinition({ loggers: [{ id: 'north' }] });
    const known = openDesk({ definition, newest: { north: DAWN }, nowMicros: DAWN });
    expect(next(known, tick, DAWN + 30 * S).effects).toEqual([]);
    const raised = next(known, tick, DAWN + 30 * S + 1).state;
    const back = next(raised, heard(DAWN - 500 * S), DAWN + 40 * S);
    expect(back.effects[0]).toEqual({
      kind: 'no data',
      noData: { bridge: 'ottermere', logger: 'north', fromMicros: DAWN, toMicros: DAWN },
    });
    expect(only(back.state)).toMatchObject({ state: 'returned to normal, unacknowledged' });
    expect(back.state.silences).toEqual({});
  });

  test('known only from its stored alarm ends with an interval from silentAfterS before it', () => {
    const raised = next(next(fresh(), heard(DAWN), DAWN + S).state, tick, DAWN + 12 * S).state;
    const again = openDesk({ definition: aDefinition(), alarms: alarmsOf(raised), nowMicros: DAWN + 50 * S });
    const back = next(again, heard(DAWN + 60 * S), DAWN + 61 * S);
    expect(back.effects[0]).toMatchObject({ noData: { fromMicros: DAWN + S, toMicros: DAWN + 60 * S } });
  });

  test('counts from the time that its clock gives, where that went back', () => {
    const ahead = next(fresh(), heard(DAWN), DAWN + S).state;
    const back = run([condition('A1', 'clock step', 'began', DAWN - 3600 * S)], ahead);
    const going = next(back, heard(DAWN - 3599 * S), DAWN + 5 * S).state;
    const silent = next(going, tick, DAWN + 16 * S);
    expect(alarmsOf(silent.state).find(({ kind }) => kind === 'no data')?.raisedMicros).toBe(DAWN - 3588 * S);
    expect(silent.effects[0]).toMatchObject({ noData: { fromMicros: DAWN - 3598 * S, toMicros: null } });
  });

  test('that was noticed by nobody still leaves its interval', () => {
    const first = next(fresh(), heard(DAWN), DAWN + S).state;
    const hole = next(first, heard(DAWN + 30 * S), DAWN + 2 * S);
    expect(hole.effects).toEqual([
      {
        kind: 'no data',
        noData: { bridge: 'ottermere', logger: 'north', fromMicros: DAWN + S, toMicros: DAWN + 30 * S },
      },
    ]);
    expect(next(first, heard(DAWN + 5 * S), DAWN + 2 * S).effects).toEqual([]);
  });
});

describe('a sensor that cannot be trusted', () => {
  test('has one alarm while it lasts, and momentary conditions have none', () => {
    const state = run([
      condition('A1', 'flat', 'began', DAWN),
      condition('A1', 'silent', 'began', DAWN + S),
      condition('A2', 'spike', 'happened', DAWN),
    ]);
    expect(only(state)).toMatchObject({ kind: 'sensor', rule: 'A1', severity: 'AL', state: 'unacknowledged' });
    const half = run([condition('A1', 'flat', 'ended', DAWN + 2 * S)], state);
    expect(only(half).state).toBe('unacknowledged');
    const whole = run([condition('A1', 'silent', 'ended', DAWN + 3 * S)], half);
    expect(only(whole).state).toBe('returned to normal, unacknowledged');
    const again = run([condition('A1', 'flat', 'began', DAWN + 9 * S)], whole);
    expect(only(again).state).toBe('unacknowledged');
  });

  test('asks for a new answer when another fault joins the one that was answered, and names both', () => {
    const id = 'ottermere-A1-20261201-051233-2';
    const answered = run([condition('A1', 'flat', 'began', DAWN), acknowledge(id)]);
    expect(only(answered).state).toBe('acknowledged');
    const both = run([condition('A1', 'silent', 'began', DAWN + 60 * S, 'nothing for 30 s')], answered);
    expect(only(both)).toMatchObject({ state: 'unacknowledged', acknowledged: null, severity: 'AL' });
    expect(only(both).message).toBe(
      'Ottermere Trough: sensor A1 is marked "flat" (seen) and marked "silent" (nothing for 30 s); its values are not to ' +
        'be trusted until it is seen to; advisory: a reason to look, without authority over train movement.',
    );
    expect(only(both).steps.map(({ what, note }) => [what, note])).toEqual([
      ['raised', 'flat (seen)'],
      ['acknowledged', 'looked at it'],
      ['raised', 'silent (nothing for 30 s)'],
    ]);
    const again = run([acknowledge(id), condition('A1', 'silent', 'ended', DAWN + 70 * S)], both);
    const flutter = run([condition('A1', 'silent', 'began', DAWN + 80 * S)], again);
    expect(only(flutter).state).toBe('acknowledged');
  });

  test('is not announced again by a replay into a desk built anew', () => {
    const events = [
      condition('A1', 'flat', 'began', DAWN),
      condition('A1', 'flat', 'ended', DAWN + S),
      condition('A1', 'silent', 'began', DAWN + 5 * S),
      condition('A1', 'flat', 'began', DAWN + 7 * S),
    ];
    const once = run(events);
    expect(only(once).message).toContain('marked "silent" (seen) and marked "flat" (seen)');
    expect(run(events, fresh(alarmsOf(once))).alarms).toEqual(once.alarms);
  });

  test('whose logger has a clock that stepped is told once a logger, as a matter of the clock', () => {
    const back = 'went back by 3600 s';
    const began = ['A1', 'A2', 'A3'].map((sensor, i) => condition(sensor, 'clock step', 'began', DAWN + i, back));
    const state = run(began);
    expect(only(state)).toMatchObject({ kind: 'sensor', rule: 'A1', severity: 'AL', state: 'unacknowledged' });
    expect(only(state).message).toBe(
      'Ottermere Trough: the clock of logger north stepped (went back by 3600 s); the times of what it measures are not ' +
        'to be trusted until its clock is seen to; advisory: a reason to look, without authority over train movement.',
    );
    const level = run([passed('A2', 'AL', 2.3, DAWN + 100 * S)], state).alarms['ottermere-ballast-20261201-051413-2'];
    expect(level?.doubt).toBe('A2 is marked "clock step"');
    const ended = ['A1', 'A2', 'A3'].map((sensor, i) => condition(sensor, 'clock step', 'ended', DAWN + 3600 * S + i));
    const over = run(ended, state);
    expect(only(over).state).toBe('returned to normal, unacknowledged');
    expect(run([...began, ...ended], over).alarms).toEqual(over.alarms);
    expect(alarmsOf(run([condition('A2', 'clock step', 'began', DAWN + 9000 * S)], over))).toHaveLength(2);
  });

  test('is not announced again by a replay', () => {
    const events = [condition('A1', 'flat', 'began', DAWN), condition('A1', 'flat', 'ended', DAWN + S)];
    const once = run([...events, condition('A1', 'silent', 'began', DAWN + 5 * S)]);
    expect(run(events, once).alarms).toEqual(once.alarms);
    const answered = run([...events, acknowledge('ottermere-A1-20261201-051233-2')]);
    expect(run([condition('A1', 'flat', 'began', DAWN)], fresh(alarmsOf(answered))).alarms).toEqual(answered.alarms);
    const later = run([condition('A1', 'flat', 'began', DAWN + 9 * S)], answered);
    expect(alarmsOf(later).map(({ state }) => state)).toEqual(['normal', 'unacknowledged']);
  });

  test('that the definition does not know has its alarm too', () => {
    expect(only(run([condition('Z9', 'silent', 'began', DAWN)])).rule).toBe('Z9');
  });

  test('is not held for ever by a fault that a pipeline opened anew has never seen', () => {
    const before = run([condition('A1', 'flat', 'began', DAWN), condition('A2', 'silent', 'began', DAWN)]);
    const opened = run([settled(DAWN + 100 * S), settled(DAWN + 279 * S)], fresh(alarmsOf(before)));
    expect(opened.alarms).toEqual(before.alarms);
    const over = alarmsOf(run([settled(DAWN + 281 * S)], opened));
    expect(over.map(({ rule, state }) => [rule, state])).toEqual([
      ['A1', 'returned to normal, unacknowledged'],
      ['A2', 'unacknowledged'],
    ]);
    expect(over[0]?.steps.at(-1)?.note).toBe('not seen again since the samples are read anew');
    const seen = run([condition('A1', 'flat', 'began', DAWN + 110 * S), settled(DAWN + 900 * S)], opened);
    expect(seen.alarms).toEqual(before.alarms);
    const known = run([settled(DAWN - 100 * S), settled(DAWN + 900 * S)], before);
    expect(known.alarms).toEqual(before.alarms);
  });

  test('is not announced twice when its whole logger is silent', () => {
    const heard = next(fresh(), { kind: 'heard', logger: 'north', fromMicros: DAWN, toMicros: DAWN }, DAWN).state;
    const silent = next(heard, { kind: 'tick' }, DAWN + 11 * S).state;
    expect(run([condition('A1', 'silent', 'began', DAWN + 11 * S)], silent).alarms).toEqual(silent.alarms);
  });
});

const heardNorth: DeskEvent = { kind: 'heard', logger: 'north', fromMicros: DAWN, toMicros: DAWN };

describe('the desk', () => {
  test('keeps at most 200 steps of an alarm and loses neither its first nor its answers', () => {
    const id = anAlarm().id;
    let state = run([acknowledge(id)], fresh([anAlarm()]));
    for (let i = 0; i < 300; i++) state = next(state, { kind: 'published', alarm: id }, DAWN + i).state;
    const alarm = only(state);
    expect(alarm.steps).toHaveLength(MAX_STEPS);
    expect(whats(alarm).slice(0, 2)).toEqual(['raised', 'acknowledged']);
    expect(alarm.steps.at(-1)?.takenMicros).toBe(DAWN + 299);
  });

  test('records that an alarm went out without asking for it to go out again', () => {
    const { effects } = next(fresh([anAlarm()]), { kind: 'published', alarm: anAlarm().id }, DAWN);
    expect(effects).toMatchObject([{ kind: 'alarm', publish: false }]);
    expect(next(fresh(), { kind: 'published', alarm: 'unknown' }, DAWN).effects).toEqual([]);
  });

  test('remembers 500 closed alarms and holds 2000 open ones', () => {
    const many = (count: number, over: Partial<Alarm>): Alarm[] =>
      Array.from({ length: count }, (_, i) => anAlarm(DAWN + i * S, 'AL', over));
    const closed = fresh(many(700, { state: 'normal', returnedMicros: DAWN }));
    expect(alarmsOf(closed)).toHaveLength(500);
    expect(alarmsOf(closed)[0]?.raisedMicros).toBe(DAWN + 200 * S);
    const open = fresh(many(2100, { state: 'returned to normal, unacknowledged', returnedMicros: DAWN }));
    expect(alarmsOf(open)).toHaveLength(2000);
    const active = fresh(many(2100, {}));
    expect(alarmsOf(active)).toHaveLength(2100);
  });

  test('refuses by assertion what belongs to another bridge', () => {
    const passage = aPassage({ bridge: 'fennick' });
    expect(() => next(fresh(), { kind: 'passage', passage }, DAWN)).toThrow(/fennick/);
  });

  test('keeps the excursions of the alarms it still holds when it drops others', () => {
    const closed = Array.from({ length: 501 }, (_, i) =>
      anAlarm(DAWN - (i + 1) * S, 'AL', { state: 'normal', returnedMicros: DAWN - (i + 0.5) * S }),
    );
    const state = run([passed('A1', 'AL', 2.3, DAWN), passed('A2', 'AL', 2.3, DAWN + 1)], fresh(closed));
    expect(alarmsOf(state)).toHaveLength(501);
    expect(state.excursions).toEqual({ 'ottermere-ballast-20261201-051233-2': { A1: null, A2: null } });
  });

  test('forgets what left or was discarded without being known', () => {
    const state = run([progress('left', DAWN), progress('discarded', DAWN)]);
    expect(state).toEqual(fresh());
    const on = run([progress('entered', DAWN), progress('left', DAWN + S)]);
    expect(run([progress('left', DAWN + S), progress('discarded', DAWN, 'another')], on)).toEqual(on);
  });

  test('ends the alarms of what a new definition no longer has, and keeps asking for their answer', () => {
    const silent = next(next(fresh(), heardNorth, DAWN).state, { kind: 'tick' }, DAWN + 11 * S).state;
    const state = run([condition('A2', 'flat', 'began', DAWN), passed('A1', 'AL', 2.3, DAWN)], silent);
    const old = aDefinition();
    const definition = aDefinition({
      loggers: [{ id: 'south' }],
      sensors: old.sensors.filter(({ id }) => id !== 'A2').map((sensor) => ({ ...sensor, logger: 'south' })),
      limits: [{ ...old.limits[0]!, id: 'deck' }],
    });
    const after = next(
      openDesk({ definition, alarms: alarmsOf(state), nowMicros: DAWN }),
      { kind: 'tick' },
      DAWN + 99 * S,
    );
    expect(alarmsOf(after.state).map((alarm) => [alarm.rule, alarm.state, alarm.steps.at(-1)?.note])).toEqual(
      ['north', 'A2', 'ballast'].map((rule) => [
        rule,
        'returned to normal, unacknowledged',
        `${rule} is no longer in the definition`,
      ]),
    );
    expect(after.state.silences).toEqual({});
    expect(after.effects.filter(({ kind }) => kind === 'alarm')).toHaveLength(3);
    const same = openDesk({ definition: old, alarms: alarmsOf(state), newest: { north: DAWN }, nowMicros: DAWN });
    expect(next(same, { kind: 'tick' }, DAWN + 12 * S).effects).toEqual([]);
  });

  test('takes a new definition', () => {
    const definition = aDefinition({ name: 'Renamed' });
    const state = run([{ kind: 'definition', definition }, passed('A1', 'AL', 2.3, DAWN)]);
    expect(only(state).message).toContain('Renamed');
  });
});
