import type { Limit } from '../contract/bridge.ts';
import type { LevelEvent } from '../contract/pipeline.ts';
import { severityOf, severityRank, type Levels, type Severity } from '../contract/severity.ts';
import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { RULE, TICK_MICROS } from './rule.ts';

/**
 * Watches the live, band-limited signal of one channel against one limit, sample by sample. An excursion begins when
 * the lowest level is passed and ends after `RULE.returnSeconds` below it. Within it an event is given for each graver
 * level, at the sample or the crest between two samples that passed it, and for each half-wave that is at least 1 %
 * higher than what was told.
 */
export interface LevelWatch {
  limit: string;
  levels: Levels;
  lowest: number;
  /** Gravest level of the present excursion; null when there is none. */
  severity: Severity | null;
  told: number;
  /** Highest magnitude of the half-wave in hand, and when. */
  crest: number;
  crestMicros: Micros;
  crestSign: number;
  lastAboveMicros: Micros;
  /** The last two samples, NaN where there is none, and when the last was: between them and the next may be a crest. */
  beforeLast: number;
  last: number;
  lastMicros: Micros;
  /** Ticks with a height above the lowest level that the bridge has not taken yet, oldest first. */
  aboveTicks: number[];
}

export function createLevelWatch(limit: Limit): LevelWatch {
  return {
    limit: limit.id,
    levels: limit.levels,
    lowest: Math.min(...Object.values(limit.levels)),
    severity: null,
    told: 0,
    crest: 0,
    crestMicros: 0,
    crestSign: 1,
    lastAboveMicros: 0,
    beforeLast: NaN,
    last: NaN,
    lastMicros: 0,
    aboveTicks: [],
  };
}

/** After a gap: what was before it makes no crest with what follows. */
export function resumeLevel(watch: LevelWatch): void {
  watch.beforeLast = NaN;
  watch.last = NaN;
}

/** Below this share of the lowest level no parabola through samples reaches the level: it rises by 0.175 of it at most. */
const NEAR = 0.7;

type Tell = (event: Pick<LevelEvent, 'limit' | 'kind' | 'severity' | 'micros' | 'value'>) => void;

/**
 * Crests are placed by a parabola through three samples, so that an alarm does not wait for a sample to fall on one: of
 * a sine it reads 0.3 % low at most at 0.09 of the rate, 1.7 % at 0.15 and 8 % at 0.225, where the samples alone read
 * 4, 11 and 24 % low.
 *
 * @param x live signal in m/s²
 * @param from first sample to watch
 * @param to one past the last
 * @param microsAt time of a sample by its index in `x`
 */
export function watchLevel(
  watch: LevelWatch,
  x: Float64Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  tell: Tell,
): void {
  const near = NEAR * watch.lowest;
  if (watch.severity === null && !(Math.abs(watch.last) > near) && !anyAbove(x, from, to, near)) {
    keepLast(watch, x, from, to, microsAt);
    return;
  }
  for (let i = from; i < to; i++) {
    const value = x[i]!;
    const crest = crestOf(watch.beforeLast, watch.last, value);
    if (Math.abs(crest) > watch.lowest) takeHeight(watch, crest, watch.lastMicros, tell);
    const micros = microsAt(i);
    takeHeight(watch, value, micros, tell);
    watch.beforeLast = watch.last;
    watch.last = value;
    watch.lastMicros = micros;
  }
}

function keepLast(
  watch: LevelWatch,
  x: Float64Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
): void {
  if (to <= from) return;
  watch.beforeLast = to - from > 1 ? x[to - 2]! : watch.last;
  watch.last = x[to - 1]!;
  watch.lastMicros = microsAt(to - 1);
}

/** Top of the parabola through three samples, signed, where the middle one is the highest; else 0. */
function crestOf(before: number, here: number, after: number): number {
  const sign = here < 0 ? -1 : 1;
  const bend = sign * (2 * here - before - after);
  if (sign * before > sign * here || sign * after > sign * here || !(bend > 0)) return 0;
  return here + (sign * (before - after) ** 2) / (8 * bend);
}

/** One height of the signal, a sample or a crest, in order of time. */
function takeHeight(watch: LevelWatch, value: number, micros: Micros, tell: Tell): void {
  const magnitude = Math.abs(value);
  const sign = value < 0 ? -1 : 1;
  if (sign !== watch.crestSign) {
    tellCrest(watch, tell);
    watch.crestSign = sign;
    watch.crest = 0;
  }
  if (magnitude > watch.lowest) {
    watch.lastAboveMicros = micros;
    const tick = Math.floor(micros / TICK_MICROS);
    if (watch.aboveTicks.at(-1) !== tick) watch.aboveTicks.push(tick);
    if (magnitude > watch.crest) {
      watch.crest = magnitude;
      watch.crestMicros = micros;
    }
    const severity = severityOf(magnitude, watch.levels)!;
    if (severityRank(severity) > severityRank(watch.severity)) {
      watch.severity = severity;
      watch.told = magnitude;
      tell({ limit: watch.limit, kind: 'passed', severity, micros, value: magnitude });
    }
  } else if (watch.severity !== null && micros - watch.lastAboveMicros >= RULE.returnSeconds * MICROS_PER_SECOND) {
    tell({ limit: watch.limit, kind: 'returned', severity: watch.severity, micros, value: watch.told });
    watch.severity = null;
    watch.told = 0;
    watch.crest = 0;
  }
}

function tellCrest(watch: LevelWatch, tell: Tell): void {
  if (watch.severity === null || watch.crest <= watch.told * 1.01) return;
  watch.told = watch.crest;
  tell({ limit: watch.limit, kind: 'passed', severity: watch.severity, micros: watch.crestMicros, value: watch.crest });
}

function anyAbove(x: Float64Array, from: number, to: number, limit: number): boolean {
  for (let i = from; i < to; i++) if (x[i]! > limit || x[i]! < -limit) return true;
  return false;
}
