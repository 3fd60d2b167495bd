import type { ConditionCode } from '../contract/health.ts';
import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND, sampleMicros } from '../contract/time.ts';
import { counted } from '../contract/counted.ts';
import { createImprint, impress, isKnown, type Imprint } from './imprint.ts';
import { RULE } from './rule.ts';

/**
 * Puts the samples of one channel in order of time: joins what continues, drops what is known already, holds what
 * came too early, and declares a gap when the missing part has not come in good time.
 *
 * A logger's clock may step. One block stamped far ahead is set aside unless the next one continues it. Blocks stamped
 * with times that have been are set aside too, as long as they are known or come singly; three seconds of new ones in a
 * row mean that the clock went back: they begin a new run at their own time.
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
  /** Pieces in a row from times that have been, and are not known. */
  strays: Piece[];
  imprint: Imprint;
  /** After the clock went back: the time that had been reached before; null once it is reached again. */
  reachedMicros: Micros | null;
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
/** One block further ahead than this is not believed alone, s. */
const FAR_SECONDS = 5;
/** So much in a row from times that have been means that the clock went back, s. */
const STRAY_SECONDS = 3;
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
    strays: [],
    imprint: createImprint(),
    reachedMicros: null,
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
    dropLoneAhead(intake, sink);
    intake.strays = [];
    const corrected = Math.abs(offBy) > stepMicros / 2;
    if (corrected) {
      intake.anchorMicros = piece.startMicros;
      intake.count = 0;
      sink.note('clock drift', 'happened', piece.startMicros, `clock corrected by ${(offBy / 1000).toFixed(3)} ms`);
    }
    pass(intake, piece.samples, 0, sink, corrected);
  } else if (offBy > 0) {
    intake.strays = [];
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
    intake.strays = [];
    sink.note('overlap', 'happened', piece.startMicros, `${counted(known, 'sample')} came twice`);
    pass(intake, piece.samples, known, sink, false);
  } else if (isKnown(intake.imprint, intake.rateHz, piece.startMicros, piece.samples) === true) {
    intake.strays = [];
    sink.note(
      'duplicate',
      'happened',
      piece.startMicros,
      `a block of ${piece.samples.length} known samples was dropped`,
    );
  } else {
    sink.note('disorder', 'happened', piece.startMicros, `a block from ${seconds} s ago was set aside`);
    stray(intake, piece, sink);
  }
}

/** A piece from a time that has been, not known: with enough others in a row it tells that the clock went back. */
function stray(intake: Intake, piece: Piece, sink: IntakeSink): void {
  const last = intake.strays.at(-1);
  if (last !== undefined && !continues(intake, last, piece)) intake.strays = [];
  intake.strays.push(piece);
  const first = intake.strays[0]!;
  const end = endMicros(intake, piece);
  if (intake.strays.length < 2 || end - first.startMicros < STRAY_SECONDS * MICROS_PER_SECOND) return;
  const expected = expectedMicros(intake)!;
  const back = (expected - first.startMicros) / MICROS_PER_SECOND;
  sink.note(
    'clock step',
    'began',
    first.startMicros,
    `the logger's clock went back by ${back.toFixed(3)} s; its samples are taken at the time it gives`,
  );
  intake.reachedMicros = Math.max(expected, intake.reachedMicros ?? expected);
  const strays = intake.strays;
  intake.strays = [];
  intake.held = [];
  begin(intake, first, sink);
  for (const next of strays.slice(1)) settle(intake, next, sink);
}

/** The stream goes on where it was: a single block far ahead was stamped wrongly. */
function dropLoneAhead(intake: Intake, sink: IntakeSink): void {
  const ahead = intake.held[0];
  if (ahead === undefined || !isLoneAhead(intake, ahead)) return;
  intake.held.shift();
  const seconds = (ahead.startMicros - expectedMicros(intake)!) / MICROS_PER_SECOND;
  sink.note(
    'clock step',
    'happened',
    ahead.startMicros,
    `a block stamped ${seconds.toFixed(3)} s ahead was set aside: those after it are on time`,
  );
}

/** Whether the first piece held is far ahead and nothing continues it yet. */
function isLoneAhead(intake: Intake, first: Piece): boolean {
  const far = first.startMicros - expectedMicros(intake)! > FAR_SECONDS * MICROS_PER_SECOND;
  const next = intake.held[1];
  return far && (next === undefined || !continues(intake, first, next));
}

function continues(intake: Intake, before: Piece, after: Piece): boolean {
  const off = Math.abs(after.startMicros - endMicros(intake, before));
  return off <= (TOLERANCE_SAMPLES * MICROS_PER_SECOND) / intake.rateHz;
}

function endMicros(intake: Intake, piece: Piece): Micros {
  return sampleMicros(piece.startMicros, piece.samples.length, intake.rateHz);
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
    const end = endMicros(intake, last);
    const late = end - expected >= RULE.reorderSeconds * MICROS_PER_SECOND && !isLoneAhead(intake, first);
    const waited = late || intake.held.length > HELD_MOST;
    if (!all && !waited) return;
    const missing = Math.round((first.startMicros - expected) / stepMicros);
    sink.note(
      'gap',
      'happened',
      expected,
      `${counted(missing, 'sample')} missing (${(missing / intake.rateHz).toFixed(3)} s)`,
    );
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
    const startMicros = sampleMicros(intake.anchorMicros!, base + at, intake.rateHz);
    impress(intake.imprint, intake.rateHz, startMicros, samples, at, end);
    sink.take(samples, at, end, stamp, afterGap);
    at = end;
  }
  intake.count = base + samples.length;
  tellReached(intake, sink);
  if (missing > 0) {
    sink.note(
      'not a number',
      'happened',
      sampleMicros(intake.anchorMicros!, base, intake.rateHz),
      `${counted(missing, 'sample')} not a number`,
    );
  }
}

function tellReached(intake: Intake, sink: IntakeSink): void {
  const expected = expectedMicros(intake)!;
  if (intake.reachedMicros === null || expected < intake.reachedMicros) return;
  intake.reachedMicros = null;
  sink.note('clock step', 'ended', expected, 'the time that had been before the clock went back is reached again');
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
