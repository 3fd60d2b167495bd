import type { ConditionCode } from '../contract/health.ts';
import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND, sampleMicros } from '../contract/time.ts';
import { RULE } from './rule.ts';

/**
 * Puts the samples of one channel in order of time: joins what continues, drops what is known already, holds what
 * came too early, and declares a gap when the missing part has not come in good time.
 */
export interface Intake {
  rateHz: number;
  /** Time of sample 0 of the present count; null before the first sample. */
  anchorMicros: Micros | null;
  count: number;
  /** Whether the next sample taken begins a new run. */
  broken: boolean;
  /** Pieces from beyond the next expected sample, by time. */
  held: Piece[];
  /** For the rate check: start and length of the last block, and the running excess of its spacing. */
  lastStart: Micros | null;
  lastCount: number;
  spacing: number;
  spacings: number;
  rateDoubted: boolean;
}

export interface Piece {
  startMicros: Micros;
  /** NaN where a sample is missing. */
  samples: Float32Array;
}

/** What the intake does with its channel's samples. */
export interface IntakeSink {
  /** Samples [from, to) in order; `startMicros` is given where they begin a new run or a corrected time. */
  take: (samples: Float32Array, from: number, to: number, startMicros: Micros | null, afterGap: boolean) => void;
  note: (code: ConditionCode, state: 'began' | 'happened' | 'ended', micros: Micros, detail: string) => void;
}

/** Most pieces held back while an earlier one is missing; at the limit the gap is declared. */
const HELD_MOST = 64;
/** A block within this many samples of its expected time continues the run. */
const TOLERANCE_SAMPLES = 1.5;
/** Relative error of the block spacing that is reported, and over how many blocks it must last. */
const RATE_ERROR = 1e-3;
const RATE_BLOCKS = 20;

export function createIntake(rateHz: number): Intake {
  return {
    rateHz,
    anchorMicros: null,
    count: 0,
    broken: true,
    held: [],
    lastStart: null,
    lastCount: 0,
    spacing: 0,
    spacings: 0,
    rateDoubted: false,
  };
}

/** Takes one block of a channel. An empty one changes nothing. */
export function takeIn(intake: Intake, piece: Piece, sink: IntakeSink): void {
  if (piece.samples.length === 0) return;
  watchRate(intake, piece, sink);
  settle(intake, piece, sink);
  releaseHeld(intake, sink, false);
}

/** At the end of a recording: nothing more will come, so what is held is taken with its gaps. */
export function closeIntake(intake: Intake, sink: IntakeSink): void {
  releaseHeld(intake, sink, true);
}

/** Time at which the next sample is expected; null before the first. */
export function expectedMicros(intake: Intake): Micros | null {
  return intake.anchorMicros === null ? null : sampleMicros(intake.anchorMicros, intake.count, intake.rateHz);
}

function settle(intake: Intake, piece: Piece, sink: IntakeSink): void {
  const expected = expectedMicros(intake);
  if (expected === null) {
    begin(intake, piece, sink);
    return;
  }
  const stepMicros = MICROS_PER_SECOND / intake.rateHz;
  const offBy = piece.startMicros - expected;
  if (Math.abs(offBy) <= TOLERANCE_SAMPLES * stepMicros) {
    const corrected = Math.abs(offBy) > stepMicros / 2;
    if (corrected) {
      intake.anchorMicros = piece.startMicros;
      intake.count = 0;
      sink.note('clock drift', 'happened', piece.startMicros, `clock corrected by ${(offBy / 1000).toFixed(3)} ms`);
    }
    pass(intake, piece.samples, 0, sink, corrected);
  } else if (offBy > 0) {
    hold(intake, piece, sink);
  } else {
    dropKnown(intake, piece, -offBy / stepMicros, sink);
  }
}

/** A piece that starts in the past: what is known of it is dropped, the rest goes on. */
function dropKnown(intake: Intake, piece: Piece, samplesBack: number, sink: IntakeSink): void {
  const known = Math.round(samplesBack);
  const seconds = (known / intake.rateHz).toFixed(3);
  if (known < piece.samples.length) {
    sink.note('overlap', 'happened', piece.startMicros, `${known} samples came twice`);
    pass(intake, piece.samples, known, sink, false);
  } else if (known - piece.samples.length > 60 * intake.rateHz) {
    sink.note(
      'clock step',
      'happened',
      piece.startMicros,
      `a block from ${seconds} s ago was set aside; did the logger's clock go back?`,
    );
  } else {
    sink.note(
      'duplicate',
      'happened',
      piece.startMicros,
      `a block of ${piece.samples.length} known samples was dropped`,
    );
  }
}

function hold(intake: Intake, piece: Piece, sink: IntakeSink): void {
  const at = intake.held.findIndex((other) => other.startMicros > piece.startMicros);
  if (at >= 0) {
    sink.note('disorder', 'happened', piece.startMicros, 'a block came after a later one');
    intake.held.splice(at, 0, piece);
  } else {
    intake.held.push(piece);
  }
}

function releaseHeld(intake: Intake, sink: IntakeSink, all: boolean): void {
  let gap = all;
  while (intake.held.length > 0) {
    const expected = expectedMicros(intake)!;
    const stepMicros = MICROS_PER_SECOND / intake.rateHz;
    const first = intake.held[0]!;
    if (first.startMicros - expected <= TOLERANCE_SAMPLES * stepMicros) {
      intake.held.shift();
      if (!gap && intake.held.length === 0) sink.note('disorder', 'happened', first.startMicros, 'a block came late');
      settle(intake, first, sink);
      continue;
    }
    const last = intake.held.at(-1)!;
    const end = sampleMicros(last.startMicros, last.samples.length, intake.rateHz);
    const waited = end - expected >= RULE.reorderSeconds * MICROS_PER_SECOND || intake.held.length > HELD_MOST;
    if (!all && !waited) return;
    const missing = Math.round((first.startMicros - expected) / stepMicros);
    sink.note('gap', 'happened', expected, `${missing} samples missing (${(missing / intake.rateHz).toFixed(3)} s)`);
    intake.held.shift();
    gap = true;
    begin(intake, first, sink);
  }
}

function begin(intake: Intake, piece: Piece, sink: IntakeSink): void {
  intake.anchorMicros = piece.startMicros;
  intake.count = 0;
  intake.broken = true;
  pass(intake, piece.samples, 0, sink, false);
}

/** Hands on samples from `from`, in stretches between NaN. */
function pass(intake: Intake, samples: Float32Array, from: number, sink: IntakeSink, corrected: boolean): void {
  const base = intake.count - from;
  let at = from;
  let missing = 0;
  let restamp = corrected;
  while (at < samples.length) {
    if (Number.isNaN(samples[at]!)) {
      at += 1;
      missing += 1;
      intake.broken = true;
      continue;
    }
    let end = at + 1;
    while (end < samples.length && !Number.isNaN(samples[end]!)) end += 1;
    const stamp = intake.broken || restamp ? sampleMicros(intake.anchorMicros!, base + at, intake.rateHz) : null;
    const afterGap = intake.broken;
    intake.broken = false;
    restamp = false;
    sink.take(samples, at, end, stamp, afterGap);
    at = end;
  }
  intake.count = base + samples.length;
  if (missing > 0) {
    sink.note(
      'not a number',
      'happened',
      sampleMicros(intake.anchorMicros!, base, intake.rateHz),
      `${missing} samples are not numbers`,
    );
  }
}

/** The spacing of block starts against their length tells a wrong rate, however small the blocks. */
function watchRate(intake: Intake, piece: Piece, sink: IntakeSink): void {
  const { lastStart, lastCount } = intake;
  intake.lastStart = piece.startMicros;
  intake.lastCount = piece.samples.length;
  if (lastStart === null || lastCount < 8) return;
  const ratio = ((piece.startMicros - lastStart) * intake.rateHz) / (MICROS_PER_SECOND * lastCount);
  if (ratio < 0.9 || ratio > 1.1) return;
  intake.spacings = Math.min(intake.spacings + 1, RATE_BLOCKS);
  intake.spacing += (ratio - intake.spacing) / intake.spacings;
  const wrong = intake.spacings >= RATE_BLOCKS && Math.abs(intake.spacing - 1) > RATE_ERROR;
  if (wrong === intake.rateDoubted) return;
  intake.rateDoubted = wrong;
  const seen = (intake.rateHz / intake.spacing).toPrecision(6);
  sink.note(
    'rate wrong',
    wrong ? 'began' : 'ended',
    piece.startMicros,
    `block spacing says ${seen} Hz, defined are ${intake.rateHz} Hz`,
  );
}
