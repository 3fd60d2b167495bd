import { describe, expect, it } from 'vitest';
import type { Day } from '#core/contract/api.ts';
import { withPassages } from '../../../client/charts/today.ts';
import { aPassage, DAWN } from '../../support/specimen.ts';

const HOUR = 3_600_000_000;
const mark = (id: string, micros: number): Day['marks'][number] => ({
  id,
  micros,
  peak: 1,
  ofGravest: 0.3,
  severity: null,
});
const known: Day = {
  day: '2026-12-01',
  startMicros: DAWN - HOUR,
  endMicros: DAWN + 20 * HOUR,
  passages: 2,
  highest: 1,
  above: { AL: 0, IL: 0, IAL: 0 },
  marks: [mark('a', DAWN), mark('b', DAWN + 4 * HOUR)],
  noData: [],
};

describe('today', () => {
  it('keeps its passages in order of time, whichever way and in whichever order they came', () => {
    const late = aPassage({ onMicros: DAWN + 6 * HOUR, peaks: { A1: 3.6 } });
    const between = aPassage({ onMicros: DAWN + 2 * HOUR, peaks: { A1: 0.5 } });
    const { marks, passages, highest, above } = withPassages(known, [late, between]);
    expect(marks.map(({ id }) => id)).toEqual(['a', between.id, 'b', late.id]);
    expect([passages, highest, above.IAL]).toEqual([4, 3.6, 1]);
  });

  it('counts a passage once, and none of another day', () => {
    const once = aPassage({ onMicros: DAWN + 2 * HOUR, peaks: { A1: 0.5 } });
    const day = withPassages(known, [once]);
    const other = aPassage({ onMicros: DAWN + 30 * HOUR, peaks: { A1: 3.6 } });
    expect(withPassages(day, [once, other])).toEqual(day);
  });
});
