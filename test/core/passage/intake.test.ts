import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import {
  closeIntake,
  createIntake,
  expectedMicros,
  takeIn,
  type Intake,
  type IntakeSink,
} from '#core/passage/intake.ts';

const RATE = 100;
const STEP = 10_000;

interface Log extends IntakeSink {
  values: number[];
  starts: (number | null)[];
  notes: string[];
  details: string[];
}

function createLog(): Log {
  const log: Log = {
    values: [],
    starts: [],
    notes: [],
    details: [],
    take: (samples, from, to, startMicros) => {
      log.values.push(...samples.subarray(from, to));
      log.starts.push(startMicros);
    },
    note: (code, state, _, detail) => {
      log.notes.push(`${code} ${state}`);
      log.details.push(detail);
    },
  };
  return log;
}

/** Samples numbered by their place in the stream. */
function piece(from: number, to: number, offsetMicros = 0): { startMicros: number; samples: Float32Array } {
  return {
    startMicros: 1_000_000 + from * STEP + offsetMicros,
    samples: Float32Array.from({ length: to - from }, (_, i) => from + i),
  };
}

function feed(...pieces: ReturnType<typeof piece>[]): { intake: Intake; log: Log } {
  const intake = createIntake(RATE);
  const log = createLog();
  for (const one of pieces) takeIn(intake, one, log);
  return { intake, log };
}

const range = (from: number, to: number): number[] => Array.from({ length: to - from }, (_, i) => from + i);

describe('the intake of one channel', () => {
  it('joins blocks that continue, and stamps only the first', () => {
    const { intake, log } = feed(piece(0, 50), piece(50, 60), piece(60, 60), piece(60, 61));
    expect(log.values).toEqual(range(0, 61));
    expect(log.starts).toEqual([1_000_000, null, null]);
    expect(log.notes).toEqual([]);
    expect(expectedMicros(intake)).toBe(1_000_000 + 61 * STEP);
  });

  it('knows no expected time before the first sample', () => {
    expect(expectedMicros(createIntake(RATE))).toBeNull();
  });

  it('drops a block that came twice, and counts it', () => {
    const { log } = feed(piece(0, 50), piece(0, 50), piece(50, 60));
    expect(log.values).toEqual(range(0, 60));
    expect(log.notes).toEqual(['duplicate happened']);
  });

  it('takes only the new part of a block that overlaps', () => {
    const { log } = feed(piece(0, 50), piece(40, 60));
    expect(log.values).toEqual(range(0, 60));
    expect(log.notes).toEqual(['overlap happened']);
  });

  it('puts blocks that changed places back in order', () => {
    const { log } = feed(piece(0, 50), piece(60, 70), piece(50, 60), piece(70, 80));
    expect(log.values).toEqual(range(0, 80));
    expect(log.notes).toEqual(['disorder happened']);
  });

  it('sorts several blocks that came too early', () => {
    const { log } = feed(piece(0, 50), piece(80, 90), piece(60, 70), piece(70, 80), piece(50, 60), piece(90, 95));
    expect(log.values).toEqual(range(0, 95));
    expect(log.notes.filter((note) => note === 'gap happened')).toEqual([]);
  });

  it('declares a gap when 1.5 s of later samples are in hand, and begins a new run after it', () => {
    const { log } = feed(piece(0, 50), piece(70, 150));
    expect(log.values).toEqual(range(0, 50));
    const later = feed(piece(0, 50), piece(70, 150), piece(150, 205));
    expect(later.log.values).toEqual([...range(0, 50), ...range(70, 205)]);
    expect(later.log.notes).toEqual(['gap happened']);
    expect(later.log.details[0]).toBe('20 samples missing (0.200 s)');
    expect(later.log.starts).toEqual([1_000_000, 1_000_000 + 70 * STEP, null]);
  });

  it('does not hold back more than 64 blocks', () => {
    const blocks = range(0, 70).map((i) => piece(60 + i, 61 + i));
    const { log } = feed(piece(0, 50), ...blocks);
    expect(log.values).toEqual([...range(0, 50), ...range(60, 130)]);
    expect(log.notes[0]).toBe('gap happened');
  });

  it('gives what it holds at the end of a recording', () => {
    const { intake, log } = feed(piece(0, 50), piece(60, 70));
    closeIntake(intake, log);
    expect(log.values).toEqual([...range(0, 50), ...range(60, 70)]);
    expect(log.notes).toEqual(['gap happened']);
  });

  it('follows a clock that drifts by less than a sample and a half, and says so', () => {
    const { log } = feed(piece(0, 50), piece(50, 60, 7_000), piece(60, 70, 7_000));
    expect(log.values).toEqual(range(0, 70));
    expect(log.starts).toEqual([1_000_000, 1_000_000 + 50 * STEP + 7_000, null]);
    expect(log.notes).toEqual(['clock drift happened']);
    expect(log.details[0]).toBe('clock corrected by 7.000 ms');
  });

  it('takes NaN as missing samples between two runs, on the same clock', () => {
    const block = piece(0, 50);
    block.samples.fill(NaN, 10, 20);
    const { log } = feed(block, piece(50, 60));
    expect(log.values).toEqual([...range(0, 10), ...range(20, 60)]);
    expect(log.starts).toEqual([1_000_000, 1_000_000 + 20 * STEP, null]);
    expect(log.notes).toEqual(['not a number happened']);
  });

  it('recognises a rate that is 0.5 % off from the spacing of the blocks, and its return', () => {
    const slow = range(0, 30).map((i) => ({ startMicros: Math.round(i * 100_500), samples: new Float32Array(10) }));
    const { intake, log } = feed(...slow);
    expect(log.notes.filter((note) => note.startsWith('rate'))).toEqual(['rate wrong began']);
    expect(log.details.find((detail) => detail.startsWith('block spacing'))).toContain('99.5');
    const after = 30 * 100_500;
    for (let i = 0; i < 60; i++) {
      takeIn(intake, { startMicros: after + i * 100_000, samples: new Float32Array(10) }, log);
    }
    expect(log.notes.filter((note) => note.startsWith('rate'))).toEqual(['rate wrong began', 'rate wrong ended']);
  });

  it('gives every sample once and in order, whatever the order and repetition of the blocks within a second', () => {
    fc.assert(
      fc.property(fc.array(fc.integer({ min: 0, max: 9 }), { maxLength: 30 }), (extra) => {
        const order = [0, ...extra, ...range(0, 10)];
        const { intake, log } = feed(...order.map((k) => piece(k * 10, k * 10 + 10)));
        closeIntake(intake, log);
        expect(log.values).toEqual(range(0, 100));
      }),
      { seed: 11, numRuns: 200 },
    );
  });
});

/** Blocks of half a second, stamped `shift` samples off. */
function halfSeconds(from: number, to: number, shift = 0): ReturnType<typeof piece>[] {
  return range(0, (to - from) / 50).map((k) => piece(from + 50 * k, from + 50 * k + 50, shift * STEP));
}

describe('the intake of a logger whose clock steps', () => {
  it('sets aside one block stamped far ahead, and loses nothing else', () => {
    const odd = { ...piece(1000, 1050), startMicros: piece(6000, 6050).startMicros };
    const { log } = feed(...halfSeconds(0, 1000), odd, ...halfSeconds(1050, 9000));
    expect(log.values).toEqual([...range(0, 1000), ...range(1050, 9000)]);
    expect(log.notes).not.toContain('clock step began');
    expect(log.details.join()).toMatch(/a block stamped 49.\d+ s ahead was set aside: those after it are on time/);
  });

  it('believes a long gap when the second block continues the first, and then loses neither', () => {
    const [first, second, ...rest] = halfSeconds(6000, 6500);
    expect(feed(...halfSeconds(0, 1000), first!).log.values).toEqual(range(0, 1000));
    const { log } = feed(...halfSeconds(0, 1000), first!, second!, ...rest);
    expect(log.values).toEqual([...range(0, 1000), ...range(6000, 6500)]);
    expect(log.notes).toEqual(['gap happened']);
  });

  it.each([600, 5000, 360_000])('goes back with a clock that went back by %i samples, and loses nothing', (back) => {
    const { intake, log } = feed(...halfSeconds(0, 1000), ...halfSeconds(1000, 1200, -back));
    expect(log.values).toEqual(range(0, 1000));
    for (const one of halfSeconds(1200, 3000, -back)) takeIn(intake, one, log);
    expect(log.values).toEqual(range(0, 3000));
    expect(log.notes).toContain('clock step began');
    expect(log.notes.includes('clock step ended')).toBe(back < 2000);
    expect(log.starts.filter((start) => start !== null)).toEqual([1_000_000, 1_000_000 + (1000 - back) * STEP]);
  });

  it('does not go back for what it knows: ten seconds sent again, or a minute', () => {
    for (const again of [1000, 6000]) {
      const { log } = feed(
        ...halfSeconds(0, 12_000),
        ...halfSeconds(11_000 - again, 11_000),
        ...halfSeconds(12_000, 13_000),
      );
      expect(log.values).toEqual(range(0, 13_000));
      expect(log.notes).not.toContain('clock step began');
      expect(log.notes).toContain('duplicate happened');
    }
  });

  it('does not go back for single blocks of another time between those of now', () => {
    const mixed = halfSeconds(1000, 3000).flatMap((block, k) => [block, ...halfSeconds(50 * k, 50 * k + 50, -9000)]);
    const { log } = feed(...halfSeconds(0, 1000), ...mixed);
    expect(log.values).toEqual(range(0, 3000));
    expect(log.notes.every((note) => note === 'disorder happened')).toBe(true);
  });
});
