import type uPlot from 'uplot';
import { afterEach, beforeEach, expect, it, vi } from 'vitest';
import { drawBehind, drawOver, type StripFrame } from '../../../client/charts/strip-ink.ts';
import { lanesOf } from '../../../client/charts/strip-layout.ts';
import { deckSensor, plainBridge } from '../../support/bridges.ts';

const COLUMN = 20_000;
const COLUMNS = 600;

/** A context that counts what is asked of it. */
function counting(): { context: CanvasRenderingContext2D; calls: Map<string, number> } {
  const calls = new Map<string, number>();
  const context = new Proxy<Record<string, unknown>>(
    {},
    {
      get: (fields, name) =>
        fields[String(name)] ??
        (() => {
          calls.set(String(name), (calls.get(String(name)) ?? 0) + 1);
          return { width: 10 };
        }),
      set(fields, name, value) {
        fields[String(name)] = value;
        return true;
      },
    },
  );
  return { context: context as unknown as CanvasRenderingContext2D, calls };
}

/** Layers that were made, and what was drawn into each. */
let layers: Map<string, number>[];

beforeEach(() => {
  layers = [];
  vi.stubGlobal('document', { fonts: { check: () => true } });
  vi.stubGlobal(
    'OffscreenCanvas',
    class {
      getContext(): unknown {
        const { context, calls } = counting();
        layers.push(calls);
        return context;
      }
    },
  );
});
afterEach(() => vi.unstubAllGlobals());

/** Sixteen strips of twelve seconds with every `everyth` point above the limits. */
function draw(everyth: number, change: Partial<StripFrame> = {}): Map<string, number> {
  const sensors = Array.from({ length: 16 }, (_, i) => deckSensor(`A${i + 1}`, 2 + i));
  const { lanes } = lanesOf(
    plainBridge({ sensors }),
    sensors.map(({ id }) => id),
  );
  const trace = Array.from({ length: 2 * COLUMNS }, (_, i) => (i % everyth === 0 ? 4 : 0.1));
  const colours = [
    'paper',
    'film',
    'tint',
    'ink',
    'ink2',
    'ink3',
    'rule',
    'grid',
    'edge',
    'signal',
    'select',
    'narrow',
  ];
  const frame: StripFrame = {
    ink: Object.fromEntries(colours.map((name) => [name, name])) as unknown as StripFrame['ink'],
    ratio: 1,
    lanes,
    ranges: lanes.map(() => ({ low: -5, high: 5 })),
    traces: lanes.map(() => trace),
    peaks: lanes.map(({ sensor }) => ({ sensor: sensor.id, peak: 4, low: 0, high: 4 })),
    peaksFromMicros: null,
    firstColumn: 0,
    columnMicros: COLUMN,
    count: COLUMNS,
    edge: COLUMNS * COLUMN,
    windowMicros: COLUMNS * COLUMN,
    newestMicros: COLUMNS * COLUMN,
    axles: 0,
    zone: 'UTC',
    still: { key: '', canvas: null },
    ...change,
  };
  const { context, calls } = counting();
  const plot = { ctx: context, bbox: { left: 98, top: 0, width: 700, height: 780 }, width: 944 } as unknown as uPlot;
  drawBehind(plot, frame);
  drawOver(plot, frame);
  return calls;
}

it('what is above a limit is drawn with as many strokes, however much of it there is, and all of it is drawn', () => {
  const [few, many] = [draw(100), draw(2)];
  expect(many.get('stroke')).toBe(few.get('stroke'));
  expect(many.get('lineTo')! - few.get('lineTo')!).toBe(16 * (COLUMNS - (2 * COLUMNS) / 100));
});

it('scales, names and limits are drawn once, and anew when a range, the ink or the lanes are others', () => {
  const still: StripFrame['still'] = { key: '', canvas: null };
  expect(draw(100, { still }).get('drawImage')).toBe(1);
  expect(draw(50, { still, edge: 2 * COLUMNS * COLUMN }).get('drawImage')).toBe(1);
  expect(layers).toHaveLength(1);
  expect(layers[0]!.get('setLineDash')).toBeGreaterThanOrEqual(16 * 3);
  draw(100, { still, ranges: Array.from({ length: 16 }, () => ({ low: -6, high: 6 })) });
  expect(layers).toHaveLength(2);
});
