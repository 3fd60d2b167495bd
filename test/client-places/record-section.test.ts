import { describe, expect, it } from 'vitest';
import { notMeasurable } from '#core/contract/measure.ts';
import { axleLines, axlesAt, drawnSensors, layoutRecord } from '../../client/charts/record.ts';
import { labelRows, linear, logarithmic, logTicks, roundDown, ticks } from '../../client/charts/scale.ts';
import { bridge, passageOf } from './passage.ts';

describe('the record section', () => {
  const seconds = { from: -0.5, to: 12 };

  it('is to scale: a metre is as wide at one end as at the other, and positions are true', () => {
    const layout = layoutRecord(bridge, 800, 600, seconds);
    expect(layout.x(10) - layout.x(0)).toBeCloseTo(10 * layout.pixelsPerMetre, 9);
    expect(layout.x(20) - layout.x(10)).toBeCloseTo(10 * layout.pixelsPerMetre, 9);
    expect(layout.section.x(10)).toBe(layout.x(10));
  });

  it('keeps the bridge inside a phone as well as a wide screen', () => {
    for (const width of [358, 800, 1500]) {
      const layout = layoutRecord(bridge, width, 600, seconds);
      expect(layout.x(0)).toBeGreaterThan(layout.left);
      expect(layout.x(20)).toBeLessThan(width);
    }
  });

  it('draws an axle as the line of its measured time and speed: its slope is the speed', () => {
    const passage = passageOf({ speedMs: 20 });
    const [first] = axleLines(bridge, passage, 0, 20);
    expect(first!.atLeft).toBeCloseTo(0, 9);
    expect(first!.atRight).toBeCloseTo(1, 9);
  });

  it('lets a train towards falling chainage come from the right', () => {
    const [first] = axleLines(bridge, passageOf({ speedMs: 20, direction: 'falling' }), 0, 20);
    expect(first!.atRight).toBeLessThan(first!.atLeft);
  });

  it('draws no axles where the speed is not measurable', () => {
    const passage = { ...passageOf({}), speedMs: notMeasurable('one axle sensor is dead') };
    expect(axleLines(bridge, passage, 0, 20)).toEqual([]);
    expect(axlesAt(bridge, passage, passage.phases.onMicros).at).toEqual([]);
  });

  it('draws heavier axles heavier', () => {
    expect(axleLines(bridge, passageOf({}), 0, 20).map(({ heavy }) => heavy)).toEqual([false, false]);
    const passage = passageOf({});
    const axles = [1, 1, 1.7].map((weight, i) => ({ ...passage.axles[0]!, behindFirstM: i, weight }));
    expect(axleLines(bridge, { ...passage, axles }, 0, 20).map(({ heavy }) => heavy)).toEqual([false, false, true]);
  });

  it('stands the train where it stood: the second axle ten metres behind the first', () => {
    const passage = passageOf({ speedMs: 20 });
    const { at } = axlesAt(bridge, passage, passage.phases.onMicros + 500_000);
    expect(at[0]).toBeCloseTo(10, 9);
    expect(at[1]).toBeCloseTo(0, 9);
  });

  it('draws one of two sensors at the same place: that of the greater peak, or the chosen one', () => {
    const passage = passageOf({});
    const drawn = (chosen: string | null): string[] => drawnSensors(bridge, passage, chosen).drawn.map(({ id }) => id);
    expect(drawn(null)).toEqual(['S1', 'A1', 'S2']);
    expect(drawn('A2')).toEqual(['S1', 'A2', 'S2']);
    expect(drawnSensors(bridge, passage, null).behind.map(({ sensor }) => sensor.id)).toEqual(['A2']);
  });
});

describe('scales', () => {
  it('lead from values to pixels and back', () => {
    const x = linear(-1, 3, 40, 440);
    expect(x(1)).toBe(240);
    expect(x.invert(240)).toBeCloseTo(1, 12);
    const y = logarithmic(0.01, 1, 200, 0);
    expect(y(0.1)).toBeCloseTo(100, 9);
    expect(y.invert(100)).toBeCloseTo(0.1, 12);
  });

  it('put a value at or below zero on the lower end of a logarithmic axis', () => {
    const y = logarithmic(0.01, 1, 200, 0);
    expect(y(0)).toBe(200);
    expect(y(-3)).toBe(200);
  });

  it('have round ticks, negative ones among them, without rounding dust', () => {
    expect(ticks(0, 4.2, 5)).toEqual([0, 1, 2, 3, 4]);
    expect(ticks(-0.3, 0.3, 6)).toEqual([-0.3, -0.2, -0.1, 0, 0.1, 0.2, 0.3]);
    expect(ticks(3, 3, 5)).toEqual([]);
  });

  it('have 1, 2 and 5 on a logarithmic axis where there is room, else powers of ten', () => {
    expect(logTicks(0.02, 3)).toEqual([0.02, 0.05, 0.1, 0.2, 0.5, 1, 2]);
    expect(logTicks(0.0001, 2)).toEqual([0.0001, 0.001, 0.01, 0.1, 1]);
  });

  it('give a scale bar a round value that is not above what fits', () => {
    expect([0.7, 1, 4.2, 5, 93].map(roundDown)).toEqual([0.5, 1, 2, 5, 50]);
  });

  it('put a label that would run into the one before it on the next row', () => {
    const at = [
      { at: 0, width: 50 },
      { at: 30, width: 50 },
      { at: 60, width: 50 },
    ];
    expect(labelRows(at)).toEqual([0, 1, 0]);
  });
});
