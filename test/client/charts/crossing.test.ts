import { describe, expect, it } from 'vitest';
import { crossingWords, nextCrossing, type Crossing, type Sight } from '../../../client/charts/crossing.ts';

const T0 = 1_764_565_953_000_000;
const on: Crossing = { passage: 'p1', enteredMicros: T0, leftMicros: null };
const gone: Crossing = { ...on, leftMicros: T0 + 8e6 };
const quiet: Sight = {
  link: 'live',
  monitoring: 'measuring',
  passageInProgress: null,
  crossing: null,
  recorded: null,
  axles: 0,
  onBridge: 0,
};

describe('a crossing', () => {
  it('goes from its coming to its leaving, and is none where it was no train', () => {
    const entered = nextCrossing(null, { passage: 'p1', kind: 'entered', micros: T0 });
    expect(entered).toEqual(on);
    expect(nextCrossing(entered, { passage: 'p1', kind: 'left', micros: T0 + 8e6 })).toEqual(gone);
    expect(nextCrossing(entered, { passage: 'p1', kind: 'discarded', micros: T0 + 8e6 })).toBeNull();
  });

  it('is not ended by a late word about the one before', () => {
    expect(nextCrossing(on, { passage: 'p0', kind: 'left', micros: T0 })).toEqual(on);
    expect(nextCrossing(on, { passage: 'p0', kind: 'discarded', micros: T0 })).toEqual(on);
  });
});

describe('the words about it', () => {
  it('count axles while it is on the bridge', () => {
    expect(crossingWords({ ...quiet, crossing: on, axles: 12, onBridge: 4 })).toBe(
      'Passage in progress: 12 axles entered, 4 on the bridge',
    );
    expect(crossingWords({ ...quiet, passageInProgress: 'p1' })).toBe('Passage in progress');
  });

  it('call no passage in progress once the train has left, and nothing at all once its record is there', () => {
    const left = { ...quiet, crossing: gone, axles: 12 };
    expect(crossingWords(left)).toBe('The train has left; its record waits for the free decay');
    expect(crossingWords({ ...left, axles: 0, recorded: 'p0' })).toContain('has left');
    expect(crossingWords({ ...left, recorded: 'p1' })).toBe('No train on the bridge');
  });

  it('say nothing of a train where no samples come, whatever was said last', () => {
    for (const monitoring of ['no data', 'no data yet', 'bad definition', null] as const) {
      const words = crossingWords({
        ...quiet,
        monitoring,
        crossing: on,
        passageInProgress: 'p1',
        axles: 3,
        onBridge: 3,
      });
      expect(words).toBe('Not known whether a train is on the bridge');
    }
    expect(crossingWords({ ...quiet, link: 'lost', crossing: on })).toBe('Not live');
  });

  it('do not claim an empty bridge where channels are missing', () => {
    expect(crossingWords({ ...quiet, monitoring: 'partly measuring' })).toBe(
      'No train seen; not all channels give data',
    );
  });
});
