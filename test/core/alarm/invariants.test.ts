import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { next, nextAll, openDesk } from '#core/alarm/desk.ts';
import type { DeskEvent, DeskState } from '#core/alarm/state.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import { SEVERITIES, severityRank } from '#core/contract/severity.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { aDefinition, aPassage, DAWN } from '../../support/specimen.ts';

const SEED = 20_261_201;
const S = MICROS_PER_SECOND;

/** States that may follow each other, from the table in life.ts; staying is always allowed. */
const MAY_FOLLOW: Record<string, readonly Alarm['state'][]> = {
  unacknowledged: ['returned to normal, unacknowledged', 'acknowledged'],
  acknowledged: ['unacknowledged', 'normal', 'returned to normal, unacknowledged'],
  'returned to normal, unacknowledged': ['unacknowledged', 'normal'],
  normal: ['unacknowledged', 'acknowledged', 'returned to normal, unacknowledged'],
};

const passageOf = (train: number): Micros => DAWN + train * 300 * S;

/** A stream as a bridge sends it: trains one after the other, crossings within, before and between them. */
const train = (index: number): fc.Arbitrary<DeskEvent[]> => {
  const on = passageOf(index);
  const id = aPassage({ onMicros: on }).id;
  const crossing = fc
    .record({
      sensor: fc.constantFrom('A1', 'A2', 'A3'),
      at: fc.integer({ min: -1, max: 120 }),
      severity: fc.integer({ min: 0, max: 2 }),
      lasting: fc.integer({ min: 1, max: 20 }),
    })
    .map(({ sensor, at, severity, lasting }) =>
      SEVERITIES.slice(0, severity + 1).flatMap((level, i): DeskEvent[] => [
        {
          kind: 'level',
          level: {
            bridge: 'ottermere',
            sensor,
            limit: 'ballast',
            kind: 'passed',
            severity: level,
            micros: on + at * S + i,
            value: 2.3 + i * 0.7,
          },
        },
        // The crest of the excursion, told at the end of a block.
        {
          kind: 'level',
          level: {
            bridge: 'ottermere',
            sensor,
            limit: 'ballast',
            kind: 'passed',
            severity: level,
            micros: on + at * S + 10 + i,
            value: 2.35 + i * 0.7,
          },
        },
        ...(i === severity
          ? [
              {
                kind: 'level',
                level: {
                  bridge: 'ottermere',
                  sensor,
                  limit: 'ballast',
                  kind: 'returned',
                  severity: level,
                  micros: on + (at + lasting) * S,
                  value: 0.1,
                },
              } as const,
            ]
          : []),
      ]),
    );
  return fc
    .record({
      crossings: fc.array(crossing, { maxLength: 6 }),
      peak: fc.constantFrom(1, 2.3, 2.9, 3.6),
      recorded: fc.boolean(),
      detected: fc.boolean(),
      answered: fc.array(fc.integer({ min: 0, max: 140 }), { maxLength: 3 }),
    })
    .map(({ crossings, peak, recorded, detected, answered }) => {
      const timed: [Micros, DeskEvent][] = crossings.flat().map((event) => [timeOf(event), event]);
      const say = (kind: 'entered' | 'left' | 'discarded', micros: Micros): [Micros, DeskEvent] => [
        micros,
        { kind: 'progress', progress: { bridge: 'ottermere', passage: id, kind, micros } },
      ];
      if (detected) timed.push(say('entered', on), say('left', on + 6 * S));
      if (detected && !recorded) timed.push(say('discarded', on + 20 * S));
      const passage = aPassage({ onMicros: on, peaks: { A1: peak, A2: peak * 0.9, A3: peak * 0.7 } });
      if (detected && recorded) timed.push([on + 25 * S, { kind: 'passage', passage }]);
      // The detector keeps what may yet be needed: 12 s, and more while a train is on the bridge.
      for (const at of [5, 30, 60, 90, 180]) {
        const micros = on + (detected && at < 25 ? -6 : at - 12) * S;
        timed.push([on + at * S, { kind: 'settled', bridge: 'ottermere', micros }]);
      }
      for (const at of answered) timed.push([on + at * S, { kind: 'acknowledge', alarm: '', by: 'x', note: '' }]);
      return timed.toSorted((a, b) => a[0] - b[0]).map(([, event]) => event);
    });
};
const timeOf = (event: DeskEvent): Micros => (event.kind === 'level' ? event.level.micros : 0);
const stream = fc.tuple(train(0), train(1), train(2)).map((trains) => trains.flat());

/** Acknowledgements in the stream answer the newest alarm that waits for one. */
function resolved(state: DeskState, event: DeskEvent): DeskEvent {
  if (event.kind !== 'acknowledge') return event;
  const waiting = Object.values(state.alarms).filter((alarm) => alarm.state.includes('unacknowledged'));
  return { ...event, alarm: waiting.at(-1)?.id ?? 'none' };
}

const start = (alarms: Alarm[] = []): DeskState => openDesk({ definition: aDefinition(), alarms, nowMicros: DAWN });
/** What an event broke, in words; checked without `expect` since it is asked some hundred thousand times. */
function violations(before: DeskState, after: DeskState): string[] {
  const found: string[] = [];
  for (const alarm of Object.values(after.alarms)) {
    const was = before.alarms[alarm.id];
    const active = alarm.state === 'unacknowledged' || alarm.state === 'acknowledged';
    if (active !== (alarm.returnedMicros === null)) found.push(`${alarm.id} is ${alarm.state} with a wrong return`);
    if (was === undefined || was === alarm) continue;
    if (severityRank(alarm.severity) < severityRank(was.severity)) found.push(`${alarm.id} fell in severity`);
    if ((alarm.liveValue ?? 0) < (was.liveValue ?? 0)) found.push(`${alarm.id} fell in value`);
    if (was.state !== alarm.state && MAY_FOLLOW[was.state]?.includes(alarm.state) !== true) {
      found.push(`${alarm.id} went from ${was.state} to ${alarm.state}`);
    }
    if (was.verdict !== null && was.verdict !== 'no passage' && alarm.verdict !== was.verdict) {
      found.push(`${alarm.id} was judged again`);
    }
    if (was.steps.some((step, i) => alarm.steps[i] !== step)) found.push(`${alarm.id} lost a step`);
  }
  const keys = Object.values(after.alarms).flatMap(({ passage, rule }) =>
    passage === null ? [] : [`${passage} ${rule}`],
  );
  if (new Set(keys).size !== keys.length) found.push(`two alarms of one passage and rule: ${keys.join(', ')}`);
  return found;
}

describe('whatever happens on the bridge', () => {
  test('there is one alarm a passage and rule, judged once, severity never falls, and states follow the table', () => {
    fc.assert(
      fc.property(stream, (events) => {
        let state = start();
        for (const event of events) {
          const after = next(state, resolved(state, event), DAWN).state;
          expect(violations(state, after)).toEqual([]);
          state = after;
        }
      }),
      { seed: SEED, numRuns: 400 },
    );
  });

  test('every event taken twice changes nothing the second time', () => {
    fc.assert(
      fc.property(stream, (events) => {
        let state = start();
        for (const event of events) {
          if (event.kind === 'acknowledge') continue;
          state = next(state, event, DAWN).state;
          expect(next(state, event, DAWN + 99).effects).toEqual([]);
        }
      }),
      { seed: SEED, numRuns: 300 },
    );
  });

  test('a replay from the beginning or to the end, into a desk built anew from the store, changes nothing', () => {
    fc.assert(
      fc.property(stream, fc.nat(60), fc.boolean(), (events, cut, toTheEnd) => {
        const seen = events.filter((event) => event.kind !== 'acknowledge');
        const state = nextAll(start(), seen, DAWN).state;
        const replayed = toTheEnd ? seen.slice(cut) : seen.slice(0, cut);
        const again = nextAll(start(Object.values(state.alarms)), replayed, DAWN + 99);
        expect(again.state.alarms).toEqual(state.alarms);
        expect(again.effects).toEqual([]);
      }),
      { seed: SEED, numRuns: 300 },
    );
  });
});
