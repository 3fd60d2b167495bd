import type { SampleBlock } from '#core/contract/block.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { RandomStream } from './random.ts';

/** What loggers and their links do to a stream of blocks. Times are true times, before any error of the clock. */
export type LoggerFault =
  /** Blocks that begin in the stretch are lost. */
  | { kind: 'gap'; fromMicros: Micros; lengthS: number }
  /** The first block from then on comes again, after so many others. */
  | { kind: 'duplicate'; fromMicros: Micros; afterBlocks: number }
  /** The first block from then on comes late, after so many others. */
  | { kind: 'disorder'; fromMicros: Micros; afterBlocks: number }
  /** Silence, then the count begins at 0, and the clock may have stepped. */
  | { kind: 'restart'; fromMicros: Micros; silentS: number; clockStepS: number }
  /** The clock runs fast by so many millionths from then on. */
  | { kind: 'clock'; fromMicros: Micros; ppm: number }
  /** Values of a sensor do not go beyond these, in its raw numbers. */
  | { kind: 'clipping'; fromMicros: Micros; lengthS: number; sensor: string; low: number; high: number }
  /** Values of a sensor come in steps, in its raw numbers. */
  | { kind: 'quantisation'; fromMicros: Micros; lengthS: number; sensor: string; step: number };

/** Faults that a logger may have on an ordinary bad day, one of each kind, spread over a stretch of time. */
export function drawFaults(random: RandomStream, fromMicros: Micros, toMicros: Micros): LoggerFault[] {
  const when = (): Micros => Math.round(random.uniform(fromMicros, toMicros));
  return [
    { kind: 'gap', fromMicros: when(), lengthS: random.uniform(0.5, 5) },
    { kind: 'duplicate', fromMicros: when(), afterBlocks: random.integer(1, 5) },
    { kind: 'disorder', fromMicros: when(), afterBlocks: random.integer(1, 3) },
    { kind: 'restart', fromMicros: when(), silentS: random.uniform(2, 8), clockStepS: random.uniform(-0.05, 0.05) },
    { kind: 'clock', fromMicros, ppm: random.uniform(-30, 30) },
  ];
}

/** A logger with faults: what it sends for each block that a sound one would send. */
export interface FaultyLogger {
  pass(block: SampleBlock): SampleBlock[];
  /** Blocks still held back. */
  end(): SampleBlock[];
}

/** One logger's stream; each logger of a bridge has faults of its own. */
export function createFaultyLogger(faults: readonly LoggerFault[]): FaultyLogger {
  let held: { block: SampleBlock; after: number }[] = [];
  const spent = new Set<LoggerFault>();
  const restarts = new Map<LoggerFault, number>();

  const release = (): SampleBlock[] => {
    held.forEach((entry) => (entry.after -= 1));
    const due = held.filter(({ after }) => after < 0).map(({ block }) => block);
    held = held.filter(({ after }) => after >= 0);
    return due;
  };

  return {
    pass(block) {
      const trueMicros = block.startMicros;
      if (faults.some((fault) => isLost(fault, trueMicros))) return [];
      const sent = stamped(valued(block, faults), faults, restarts);
      const out: SampleBlock[] = [];
      const late = firstDue(faults, spent, 'disorder', trueMicros);
      const twice = firstDue(faults, spent, 'duplicate', trueMicros);
      const due = release();
      if (late === undefined) out.push(sent);
      else held.push({ block: sent, after: late.afterBlocks - 1 });
      if (twice !== undefined) held.push({ block: sent, after: twice.afterBlocks - 1 });
      return [...out, ...due];
    },
    end() {
      const rest = held.map(({ block }) => block);
      held = [];
      return rest;
    },
  };
}

function firstDue<Kind extends 'duplicate' | 'disorder'>(
  faults: readonly LoggerFault[],
  spent: Set<LoggerFault>,
  kind: Kind,
  micros: Micros,
): Extract<LoggerFault, { kind: Kind }> | undefined {
  const due = faults.find((fault) => fault.kind === kind && fault.fromMicros <= micros && !spent.has(fault));
  if (due === undefined) return undefined;
  spent.add(due);
  return due as Extract<LoggerFault, { kind: Kind }>;
}

function isLost(fault: LoggerFault, micros: Micros): boolean {
  const silentS = fault.kind === 'gap' ? fault.lengthS : fault.kind === 'restart' ? fault.silentS : 0;
  return micros >= fault.fromMicros && micros < fault.fromMicros + silentS * MICROS_PER_SECOND;
}

/** Time and number as this logger writes them. */
function stamped(block: SampleBlock, faults: readonly LoggerFault[], restarts: Map<LoggerFault, number>): SampleBlock {
  let { startMicros, sequence } = block;
  for (const fault of faults) {
    if (fault.fromMicros > block.startMicros) continue;
    if (fault.kind === 'clock') startMicros += Math.round((block.startMicros - fault.fromMicros) * fault.ppm * 1e-6);
    if (fault.kind !== 'restart') continue;
    startMicros += Math.round(fault.clockStepS * MICROS_PER_SECOND);
    if (block.sequence === null) continue;
    const first = restarts.get(fault) ?? block.sequence;
    restarts.set(fault, first);
    sequence = block.sequence - first;
  }
  return { ...block, startMicros, sequence };
}

function valued(block: SampleBlock, faults: readonly LoggerFault[]): SampleBlock {
  const active = faults.filter(
    (fault) =>
      (fault.kind === 'clipping' || fault.kind === 'quantisation') &&
      block.startMicros >= fault.fromMicros &&
      block.startMicros < fault.fromMicros + fault.lengthS * MICROS_PER_SECOND,
  );
  if (active.length === 0) return block;
  return {
    ...block,
    channels: block.channels.map(({ sensor, samples }) => ({
      sensor,
      samples: active.reduce((values, fault) => {
        if (fault.kind === 'clipping' && fault.sensor === sensor) {
          return values.map((value) => Math.min(fault.high, Math.max(fault.low, value)));
        }
        if (fault.kind === 'quantisation' && fault.sensor === sensor) {
          return values.map((value) => Math.round(value / fault.step) * fault.step);
        }
        return values;
      }, samples),
    })),
  };
}
