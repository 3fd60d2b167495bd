import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { decodeFrame, type Frame } from '#core/contract/frame.ts';
import { COLUMN_MICROS } from '#core/contract/live.ts';
import { sampleMicros } from '#core/contract/time.ts';
import { columnStep } from '../../server/web/columns.ts';
import {
  addSamples,
  beginServing,
  createEnvelopes,
  nextFrame,
  pastColumnMicros,
  pastFrame,
  type Envelopes,
} from '../../server/web/envelopes.ts';
import { createRandom } from '../support/random.ts';
import { DAWN } from '../support/specimen.ts';

const decode = (bytes: Uint8Array | null): Frame | null =>
  bytes === null ? null : decodeFrame(bytes, (utf8) => new TextDecoder().decode(utf8));

/** Columns of one sensor over all frames, by their start; what a page would hold. */
function collect(frames: (Frame | null)[], sensor: string): Map<number, [number, number]> {
  const columns = new Map<number, [number, number]>();
  for (const frame of frames) {
    for (const channel of frame?.header.channels ?? []) {
      if (channel.sensor !== sensor) continue;
      for (let i = 0; i < channel.count; i++) {
        const at = channel.at + 2 * i;
        const start = channel.startMicros + i * channel.stepMicros;
        expect(columns.has(start), `column ${start} came twice`).toBe(false);
        columns.set(start, [frame!.data[at]!, frame!.data[at + 1]!]);
      }
    }
  }
  return columns;
}

/** The independent slow version: every sample of a block put into its column. */
function slowColumns(
  columns: Map<number, [number, number]>,
  startMicros: number,
  rateHz: number,
  x: Float32Array,
  step: number,
): void {
  x.forEach((value, i) => {
    const start = Math.floor(sampleMicros(startMicros, i, rateHz) / step) * step;
    const [min, max] = columns.get(start) ?? [Infinity, -Infinity];
    columns.set(start, [Math.min(min, value), Math.max(max, value)]);
  });
}

function feed(envelopes: Envelopes, sensor: string, startMicros: number, rateHz: number, samples: Float32Array): void {
  addSamples(envelopes, { bridge: envelopes.bridge, sensor, startMicros, rateHz, samples });
}

describe('live envelopes', () => {
  test('columns are the exact minima and maxima of their samples, at any rate, width, block split and flush', () => {
    const rates = fc.constantFrom(1, 50, 100, 128, 200, 256, 333.25, 500, 1000, 2000);
    const cuts = fc.array(fc.integer({ min: 0, max: 400 }), { minLength: 1, maxLength: 20 });
    const widths = fc.constantFrom(...COLUMN_MICROS);
    fc.assert(
      fc.property(
        rates,
        widths,
        cuts,
        fc.integer({ min: 0, max: 1e6 }),
        fc.nat(),
        (rateHz, width, sizes, shift, seed) => {
          const random = createRandom(seed);
          const startMicros = DAWN + shift;
          const envelopes = createEnvelopes('b', 5000);
          const served = beginServing(envelopes, width, null);
          const total = sizes.reduce((sum, size) => sum + size, 0);
          const x = Float32Array.from({ length: total }, () => random.uniform(-1, 1));
          const frames: (Frame | null)[] = [];
          const step = columnStep(width, rateHz);
          const expected = new Map<number, [number, number]>();
          let at = 0;
          for (const size of sizes) {
            // At most the four seconds that are held between two flushes.
            for (let from = at; from < at + size; from += Math.ceil(rateHz)) {
              const to = Math.min(at + size, from + Math.ceil(rateHz));
              const blockMicros = sampleMicros(startMicros, from, rateHz);
              feed(envelopes, 'A', blockMicros, rateHz, x.subarray(from, to));
              slowColumns(expected, blockMicros, rateHz, x.subarray(from, to), step);
              frames.push(decode(nextFrame(envelopes, width, null, served)));
            }
            at += size;
          }
          const found = collect(frames, 'A');
          // The newest column of each step may still be open.
          const newest = Math.max(...expected.keys());
          expect(found.size).toBeGreaterThanOrEqual(expected.size - 2);
          for (const [start, pair] of found) {
            expect(start).toBeLessThanOrEqual(newest);
            expect(pair).toEqual(expected.get(start));
          }
        },
      ),
      { numRuns: 60 },
    );
  });

  test('an unbroken channel never has an empty column, however slow it is', () => {
    for (const rateHz of [0.2, 1, 33, 99.9, 150, 200, 256]) {
      for (const width of COLUMN_MICROS) {
        const step = columnStep(width, rateHz);
        expect(step % width).toBe(0);
        expect(step).toBeGreaterThanOrEqual(1e6 / rateHz);
      }
    }
  });

  test('a gap is NaN, and only the gap', () => {
    const envelopes = createEnvelopes('b', 5000);
    const served = beginServing(envelopes, 10_000, null);
    feed(envelopes, 'A', DAWN, 500, new Float32Array(50).fill(1));
    const frames = [decode(nextFrame(envelopes, 10_000, null, served))];
    feed(envelopes, 'A', DAWN + 200_000, 500, new Float32Array(50).fill(2));
    frames.push(decode(nextFrame(envelopes, 10_000, null, served)));
    const columns = [...collect(frames, 'A')].sort(([a], [b]) => a - b);
    const words = columns.map(([start, [min, max]]) => `${(start - DAWN) / 10_000}:${min},${max}`);
    const ones = Array.from({ length: 10 }, (_, i) => `${i}:1,1`);
    const holes = Array.from({ length: 10 }, (_, i) => `${i + 10}:NaN,NaN`);
    const twos = Array.from({ length: 9 }, (_, i) => `${i + 20}:2,2`);
    expect(words).toEqual([...ones, ...holes, ...twos]);
  });

  test('samples a little older than the picture are left out, and do not disturb it', () => {
    const envelopes = createEnvelopes('b', 5000);
    const served = beginServing(envelopes, 20_000, null);
    feed(envelopes, 'A', DAWN, 500, new Float32Array(500).fill(1));
    feed(envelopes, 'A', DAWN + 500_000, 500, new Float32Array(100).fill(9));
    feed(envelopes, 'A', DAWN + 1_000_000, 500, new Float32Array(500).fill(1));
    const columns = collect([decode(nextFrame(envelopes, 20_000, null, served))], 'A');
    expect(new Set([...columns.values()].flat())).toEqual(new Set([1]));
    expect(Math.min(...columns.keys())).toBe(DAWN);
  });

  test('a logger whose clock goes back is shown at its new time at once', () => {
    const envelopes = createEnvelopes('b', 1000);
    const served = beginServing(envelopes, 10_000, null);
    const columnsOf = (startMicros: number): number[] => {
      feed(envelopes, 'A1', startMicros, 500, new Float32Array(500).fill(1));
      nextFrame(envelopes, 10_000, null, served);
      feed(envelopes, 'A1', startMicros + 1_000_000, 500, new Float32Array(500).fill(1));
      return [...collect([decode(nextFrame(envelopes, 10_000, null, served))], 'A1').keys()];
    };
    expect(columnsOf(DAWN)[0]).toBeGreaterThan(DAWN);
    const back = columnsOf(DAWN - 30_000_000);
    expect(back.length).toBeGreaterThan(90);
    expect(back.every((start) => start < DAWN - 20_000_000)).toBe(true);
  });

  test('the past joins what follows without hole or overlap, in wider columns where the width asked for is not held', () => {
    for (const pastMicros of [5_000, 40_000]) {
      const envelopes = createEnvelopes('b', pastMicros);
      for (let second = 0; second < 30; second++) {
        feed(envelopes, 'A', DAWN + second * 1_000_000, 500, new Float32Array(500).fill(second));
      }
      const served = beginServing(envelopes, 5_000, null);
      const past = decode(pastFrame(envelopes, 5_000, null, served, 20_000_000));
      feed(envelopes, 'A', DAWN + 30_000_000, 500, new Float32Array(500).fill(30));
      const frames = [past, decode(nextFrame(envelopes, 5_000, null, served))];
      const spans = frames
        .flatMap((frame) => frame?.header.channels ?? [])
        .map(({ startMicros, stepMicros, count }) => [startMicros, startMicros + count * stepMicros] as const);
      for (let i = 1; i < spans.length; i++) expect(spans[i]![0]).toBe(spans[i - 1]![1]);
      expect(spans[0]![0]).toBeLessThanOrEqual(DAWN + 10_000_000);
      expect(spans[0]![0]).toBeGreaterThan(DAWN + 9_000_000);
      for (const [min, max] of collect(frames, 'A').values())
        expect(Number.isNaN(min) || Number.isNaN(max)).toBe(false);
    }
  });

  test('a frame of the past is bounded: 24 000 wide columns, and of each sensor less than one wide column in narrow ones', () => {
    for (const sensors of [1, 16, 256]) {
      const envelopes = createEnvelopes('b', 5_000);
      for (let second = 0; second < 70; second++) {
        for (let s = 0; s < sensors; s++) {
          feed(envelopes, `A${s}`, DAWN + second * 1_000_000, 200, new Float32Array(200).fill(second));
        }
      }
      const served = beginServing(envelopes, 5_000, null);
      const bytes = pastFrame(envelopes, 5_000, null, served, 60_000_000)!;
      const { channels } = decode(bytes)!.header;
      const [narrow, wide] = [5_000, Math.max(...channels.map(({ stepMicros }) => stepMicros))];
      const count = (step: number): number =>
        channels.reduce((sum, { stepMicros, count }) => sum + (stepMicros === step ? count : 0), 0);
      expect(count(wide)).toBeLessThanOrEqual(24_000);
      if (wide > narrow) expect(count(narrow)).toBeLessThan((sensors * wide) / narrow);
      expect(new Set(channels.map(({ sensor }) => sensor)).size).toBe(sensors);
    }
  });

  test('the memory of the past of all channels together is bounded', () => {
    for (const channels of [1, 48, 800, 8_000, 80_000]) {
      expect((channels * 60e6 * 8) / pastColumnMicros(channels)).toBeLessThanOrEqual(64 * 1024 * 1024);
    }
    expect(pastColumnMicros(48)).toBe(5_000);
  });

  test('a sensor that begins while a page looks on is shown from its first column; a changed rate starts anew', () => {
    const envelopes = createEnvelopes('b', 5_000);
    const served = beginServing(envelopes, 20_000, null);
    expect(nextFrame(envelopes, 20_000, null, served)).toBeNull();
    feed(envelopes, 'A', DAWN, 500, new Float32Array(500).fill(1));
    const first = decode(nextFrame(envelopes, 20_000, null, served))!;
    expect(first.header.channels[0]).toMatchObject({ sensor: 'A', startMicros: DAWN, stepMicros: 20_000, count: 49 });
    feed(envelopes, 'A', DAWN + 1_000_000, 10, new Float32Array(10).fill(2));
    const second = decode(nextFrame(envelopes, 20_000, null, served))!;
    expect(second.header.channels[0]).toMatchObject({ sensor: 'A', stepMicros: 160_000 });
    expect(second.data.every((value) => value === 2)).toBe(true);
  });
});
