import { describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import { createFaultyLogger, type LoggerFault } from '../../simulator/faults.ts';
import { DAWN } from '../support/specimen.ts';

/** Twenty blocks of half a second; block k holds the value k. */
function stream(faults: readonly LoggerFault[]): SampleBlock[] {
  const logger = createFaultyLogger(faults);
  const sent = Array.from({ length: 20 }, (_, k) =>
    logger.pass({
      bridge: 'ottermere',
      logger: 'north',
      sequence: 100 + k,
      startMicros: DAWN + k * 500_000,
      rateHz: 10,
      channels: [
        { sensor: 'A1', samples: new Float64Array(5).fill(k) },
        { sensor: 'A2', samples: new Float64Array(5).fill(-k) },
      ],
    }),
  );
  return [...sent.flat(), ...logger.end()];
}

const numbersOf = (blocks: readonly SampleBlock[]): number[] => blocks.map(({ channels }) => channels[0]!.samples[0]!);
const at = (seconds: number): number => DAWN + seconds * MICROS_PER_SECOND;

describe('a logger with faults', () => {
  it('sends everything once and unchanged where it has none', () => {
    expect(numbersOf(stream([]))).toEqual(Array.from({ length: 20 }, (_, k) => k));
  });

  it('loses the blocks of a gap and goes on in time', () => {
    const blocks = stream([{ kind: 'gap', fromMicros: at(2), lengthS: 1.5 }]);
    expect(numbersOf(blocks)).toEqual([0, 1, 2, 3, ...Array.from({ length: 13 }, (_, k) => 7 + k)]);
    expect(blocks[4]).toMatchObject({ startMicros: at(3.5), sequence: 107 });
  });

  it('sends one block again, after others', () => {
    const blocks = stream([{ kind: 'duplicate', fromMicros: at(1), afterBlocks: 2 }]);
    expect(numbersOf(blocks).slice(0, 7)).toEqual([0, 1, 2, 3, 4, 2, 5]);
    expect(blocks).toHaveLength(21);
    expect(blocks[5]).toEqual(blocks[2]);
  });

  it('sends one block late', () => {
    const blocks = stream([{ kind: 'disorder', fromMicros: at(1), afterBlocks: 2 }]);
    expect(numbersOf(blocks).slice(0, 6)).toEqual([0, 1, 3, 4, 2, 5]);
    expect(blocks).toHaveLength(20);
  });

  it('gives what it still holds at the end', () => {
    const blocks = stream([{ kind: 'disorder', fromMicros: at(9), afterBlocks: 50 }]);
    expect(numbersOf(blocks).slice(-2)).toEqual([19, 18]);
  });

  it('counts from 0 after a restart, with its clock a step off', () => {
    const blocks = stream([{ kind: 'restart', fromMicros: at(4), silentS: 2, clockStepS: -0.25 }]);
    expect(numbersOf(blocks)).toEqual([0, 1, 2, 3, 4, 5, 6, 7, 12, 13, 14, 15, 16, 17, 18, 19]);
    expect(blocks[8]).toMatchObject({ sequence: 0, startMicros: at(6 - 0.25) });
    expect(blocks[9]).toMatchObject({ sequence: 1, startMicros: at(6.5 - 0.25) });
  });

  it('runs fast by as many millionths as its clock does', () => {
    const blocks = stream([{ kind: 'clock', fromMicros: at(1), ppm: 100 }]);
    expect(blocks[1]?.startMicros).toBe(at(0.5));
    expect(blocks[12]?.startMicros).toBe(at(6) + 500); // 5 s × 100 ppm
  });

  it('clips and quantises the sensor it is told to, and no other', () => {
    const during = { fromMicros: at(0), lengthS: 60, sensor: 'A1' };
    const blocks = stream([
      { kind: 'clipping', ...during, low: -3, high: 15 },
      { kind: 'quantisation', ...during, step: 4 },
    ]);
    expect(blocks[19]?.channels.map(({ samples }) => samples[0])).toEqual([16, -19]);
    expect(blocks[5]?.channels.map(({ samples }) => samples[0])).toEqual([4, -5]);
  });
});
