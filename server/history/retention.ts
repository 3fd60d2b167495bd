import type { Passage } from '#core/contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import type { Archive, Place, StoredDefinition } from './archive.ts';
import { civilDayAt } from './days.ts';
import type { Ask, Row } from './database.ts';

/** Which wave forms are kept. Passages themselves, and what was measured of them, are kept for ever. */
export interface RetentionRules {
  /** All wave forms of this many days. */
  keepAllDays: number;
  /** After that, of each civil day and direction this many with the highest peaks; 0 for none. */
  keepHighestPerDay: number;
}

/** Exceedances (a severity, or an alarm that names the passage) are kept for ever, whatever the rules. */
export const RETENTION: RetentionRules = { keepAllDays: 30, keepHighestPerDay: 1 };

export interface Thinned {
  /** Wave forms dropped in this call, and the bytes that freed. */
  dropped: number;
  bytes: number;
  /** More were due than one call takes; call again. */
  more: boolean;
}

/** Files that one call rewrites, so that it takes seconds, not hours. */
const AT_ONCE = 500;
const DAY_MICROS = 86_400 * MICROS_PER_SECOND;

/**
 * The wave forms that the rules let go, oldest first.
 *
 * Whole civil days are judged, so a passage that is the highest of its day stays so however often this runs: a dropped one
 * was lower.
 */
export async function dueWaveforms(
  ask: Ask,
  rules: RetentionRules,
  nowMicros: Micros,
  timeZoneOf: (bridge: string) => string,
): Promise<Place[]> {
  const rows = await ask(
    `SELECT p.id, p.bridge, p.on_micros, p.direction, p.peak FROM passages p
     WHERE p.has_waveform AND p.on_micros < $1 AND p.severity IS NULL
       AND NOT EXISTS (SELECT 1 FROM alarms a WHERE a.passage = p.id)
     ORDER BY p.on_micros, p.id`,
    [nowMicros - rules.keepAllDays * DAY_MICROS],
  );
  const groups = new Map<string, Row[]>();
  for (const row of rows) {
    const bridge = String(row['bridge']);
    const key = `${bridge} ${civilDayAt(Number(row['on_micros']), timeZoneOf(bridge))} ${String(row['direction'])}`;
    groups.set(key, [...(groups.get(key) ?? []), row]);
  }
  const kept = new Set(
    [...groups.values()].flatMap((group) =>
      group.toSorted((a, b) => Number(b['peak'] ?? -1) - Number(a['peak'] ?? -1)).slice(0, rules.keepHighestPerDay),
    ),
  );
  return rows
    .filter((row) => !kept.has(row))
    .map((row) => ({ id: String(row['id']), bridge: String(row['bridge']), onMicros: Number(row['on_micros']) }));
}

/** What thinning needs of the history. */
interface ThinningParts {
  archive: Archive;
  passage(id: string): Promise<Passage | null>;
  definitionAt(bridge: string, version: number): StoredDefinition | null;
  /** Marks a passage as thinned, durably. */
  mark(id: string): Promise<void>;
}

/**
 * Drops the samples of what is due; the file keeps its sheet. First the file, then the mark: where a crash comes between,
 * the next call does it again.
 */
export async function thin(due: readonly Place[], parts: ThinningParts): Promise<Thinned> {
  const thinned: Thinned = { dropped: 0, bytes: 0, more: due.length > AT_ONCE };
  for (const place of due.slice(0, AT_ONCE)) {
    const passage = await parts.passage(place.id);
    const definition = passage === null ? null : parts.definitionAt(place.bridge, passage.provenance.definitionVersion);
    if (passage !== null && definition !== null)
      thinned.bytes += await parts.archive.thin(place, { passage, definition });
    await parts.mark(place.id);
    thinned.dropped += 1;
  }
  return thinned;
}
