import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import type { BridgeDefinition, Sensor, Span } from '#core/contract/bridge.ts';
import { drawSection } from '../../../client/charts/section-figures.ts';
import { layoutSection, placeSensors } from '../../../client/charts/section-layout.ts';

const sensor = (id: string, alongM: number): Sensor => ({
  id,
  quantity: 'acceleration',
  logger: 'L1',
  mount: 'deck',
  alongM,
  unit: 'm/s2',
  rateHz: 500,
});

function bridge(
  lengths: readonly number[],
  structure: Span['structure'] = 'steel trough',
  sensors: Sensor[] = [],
): BridgeDefinition {
  let startM = 0;
  const spans = lengths.map((lengthM, i): Span => {
    const span: Span = { id: `s${i}`, startM, lengthM, structure, track: 'ballasted' };
    startM += lengthM;
    return span;
  });
  return {
    spanbeat: 1,
    id: 'b',
    name: 'B',
    line: { name: 'L' },
    chainageKm: 41.32,
    spans,
    loggers: [{ id: 'L1' }],
    sensors,
    limits: [],
  };
}

describe('the long section', () => {
  it('is to scale: a metre is as long everywhere and as high as it is long', () => {
    const layout = layoutSection(bridge([17.6]), 1384);
    const metre = layout.x(1) - layout.x(0);
    expect(layout.x(17.6) - layout.x(0)).toBeCloseTo(17.6 * metre, 9);
    expect(layout.y(1) - layout.y(0)).toBeCloseTo(metre, 9);
    // 1 : n on paper at 96 CSS pixels to the inch of 25.4 mm.
    expect(metre).toBeCloseTo(96 / 0.0254 / layout.scale, 9);
  });

  it('shows the whole bridge with track before and behind it, whatever its length and the room', () => {
    fc.assert(
      fc.property(
        fc.array(fc.double({ min: 3, max: 400, noNaN: true }), { minLength: 1, maxLength: 8 }),
        fc.integer({ min: 200, max: 2560 }),
        (lengths, room) => {
          const layout = layoutSection(bridge(lengths), room);
          expect(layout.x(0)).toBeGreaterThan(0);
          expect(layout.x(layout.lengthM)).toBeLessThan(layout.width);
          expect(layout.x(layout.lengthM / 2)).toBeCloseTo(layout.width / 2, 6);
        },
      ),
    );
  });

  it('shows the whole bridge on a narrow screen, too, and is wider than it only where its words need the room', () => {
    for (const lengths of [[17.6], [39.6, 39.6]]) {
      const narrow = layoutSection(bridge(lengths), 358);
      expect(narrow.width).toBe(358);
      expect(narrow.fromM).toBeLessThan(0);
      expect(narrow.toM).toBeGreaterThan(narrow.lengthM);
    }
    const spans = Array.from({ length: 12 }, () => 20);
    const viaduct = layoutSection(bridge(spans), 358);
    expect(viaduct.width).toBeGreaterThanOrEqual(12 * 60);
  });

  it('keeps no room for a train where none is to be drawn', () => {
    const [full, low] = [true, false].map((train) => layoutSection(bridge([17.6]), 1384, { train }));
    expect(low!.height).toBeLessThan(full!.height - 4 * full!.pxPerM);
    expect(low!.scale).toBe(full!.scale);
  });

  it('keeps all balloons within a narrow drawing', () => {
    const sensors = Array.from({ length: 40 }, (_, i) => sensor(`A${i}`, i < 20 ? 0 : 17.6));
    const definition = bridge([17.6], 'steel trough', sensors);
    const layout = layoutSection(definition, 358);
    for (const { balloonX, half } of placeSensors(definition, layout)) {
      expect(balloonX - half).toBeGreaterThanOrEqual(0);
      expect(balloonX + half).toBeLessThanOrEqual(layout.width);
    }
  });

  it('draws every kind of structure without a broken figure', () => {
    const kinds: Span['structure'][] = [
      'steel trough',
      'steel plate girder',
      'steel truss',
      'steel box girder',
      'composite',
      'prestressed concrete',
      'reinforced concrete',
      'filler beam',
      'masonry arch',
      'other',
    ];
    for (const kind of kinds) {
      for (const room of [390, 1384, 2500]) {
        const figures = drawSection(layoutSection(bridge([12, 30], kind), room));
        expect(figures.length).toBeGreaterThan(8);
        for (const { d } of figures) expect(d, kind).not.toMatch(/NaN|Infinity|undefined/);
      }
    }
  });

  it('sets each sensor at its true place and its balloon beside all others', () => {
    const definition = bridge([17.6], 'steel trough', [
      sensor('A1', 8.8),
      sensor('A2', 8.8),
      sensor('A3', 8.9),
      sensor('LONG-NAME', 9),
    ]);
    const layout = layoutSection(definition, 1384);
    const placed = placeSensors(definition, layout);
    placed.forEach(({ sensor: each, x }) => expect(x).toBeCloseTo(layout.x(each.alongM), 9));
    for (let i = 1; i < placed.length; i++) {
      const [a, b] = [placed[i - 1]!, placed[i]!];
      expect(b.balloonX - b.half).toBeGreaterThanOrEqual(a.balloonX + a.half);
    }
  });
});
