import type { Limit } from '../contract/bridge.ts';
import type { LevelEvent } from '../contract/pipeline.ts';
import { severityOf, severityRank, type Levels, type Severity } from '../contract/severity.ts';
import type { Micros } from '../contract/time.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { RULE } from './rule.ts';

/**
 * Watches the live, band-limited signal of one channel against one limit, sample by sample. An excursion begins when
 * the lowest level is passed and ends after `RULE.returnSeconds` below it. Within it an event is given for each graver
 * level, at the sample that passed it, and for each half-wave that is at least 1 % higher than what was told.
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
  };
}

/**
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
  tell: (event: Pick<LevelEvent, 'limit' | 'kind' | 'severity' | 'micros' | 'value'>) => void,
): void {
  if (watch.severity === null && !anyAbove(x, from, to, watch.lowest)) return;
  for (let i = from; i < to; i++) {
    const value = x[i]!;
    const magnitude = Math.abs(value);
    const sign = value < 0 ? -1 : 1;
    if (sign !== watch.crestSign) {
      tellCrest(watch, tell);
      watch.crestSign = sign;
      watch.crest = 0;
    }
    if (magnitude > watch.lowest) {
      const micros = microsAt(i);
      watch.lastAboveMicros = micros;
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
    } else if (watch.severity !== null) {
      const micros = microsAt(i);
      if (micros - watch.lastAboveMicros < RULE.returnSeconds * MICROS_PER_SECOND) continue;
      tell({ limit: watch.limit, kind: 'returned', severity: watch.severity, micros, value: watch.told });
      watch.severity = null;
      watch.told = 0;
      if (!anyAbove(x, i, to, watch.lowest)) return;
    }
  }
}

function tellCrest(watch: LevelWatch, tell: Parameters<typeof watchLevel>[5]): void {
  if (watch.severity === null || watch.crest <= watch.told * 1.01) return;
  watch.told = watch.crest;
  tell({ limit: watch.limit, kind: 'passed', severity: watch.severity, micros: watch.crestMicros, value: watch.crest });
}

function anyAbove(x: Float64Array, from: number, to: number, limit: number): boolean {
  for (let i = from; i < to; i++) if (x[i]! > limit || x[i]! < -limit) return true;
  return false;
}
