import { SpanbeatError } from '#core/contract/errors.ts';
import type { Day, DayQuery } from '#core/contract/api.ts';
import type { Severity } from '#core/contract/severity.ts';
import type { Micros } from '#core/contract/time.ts';
import type { Ask } from './database.ts';

const MAX_DAYS = 400;
const DAY_MS = 86_400_000;

interface CivilDay {
  /** `2026-12-01` */
  day: string;
  startMicros: Micros;
  endMicros: Micros;
}

/**
 * The strips of the days asked for, in the bridge's time zone: passages, highest, exceedances, times without monitoring.
 * A time without monitoring is one in which at least one logger of the bridge sent nothing.
 *
 * @param nowMicros ends an interval that still lasts
 * @param definedMicros when the bridge was first defined; monitoring began then, or with a passage on record from before
 * @throws SpanbeatError REQUEST_INVALID for no such day, more than 400 days, or an unknown time zone
 */
export async function daysOf(
  ask: Ask,
  query: DayQuery,
  timeZone: string,
  nowMicros: Micros,
  definedMicros: Micros | null,
): Promise<Day[]> {
  const civil = civilDays(query.from, query.to, timeZone);
  const [first, last] = [civil[0], civil.at(-1)];
  if (first === undefined || last === undefined) return [];
  const span = [query.bridge, first.startMicros, last.endMicros];
  const passages = await ask(
    `SELECT id, on_micros, peak, of_gravest, severity FROM passages
     WHERE bridge = $1 AND on_micros >= $2 AND on_micros < $3 ORDER BY on_micros, id`,
    span,
  );
  const [oldest] = await ask(`SELECT min(on_micros) AS micros FROM passages WHERE bridge = $1`, [query.bridge]);
  const oldestMicros = oldest?.['micros'] == null ? Infinity : Number(oldest['micros']);
  const beganMicros = Math.min(definedMicros ?? Infinity, oldestMicros);
  const holes = await ask(
    `SELECT from_micros, to_micros FROM no_data
     WHERE bridge = $1 AND coalesce(to_micros, $4) > $2 AND from_micros < $3 ORDER BY from_micros`,
    [...span, nowMicros],
  );
  const noData = merged(
    holes.map((row) => ({
      fromMicros: Number(row['from_micros']),
      toMicros: row['to_micros'] === null ? nowMicros : Number(row['to_micros']),
    })),
  );
  const marks = passages.map((row) => ({
    id: String(row['id']),
    micros: Number(row['on_micros']),
    peak: row['peak'] === null ? null : Number(row['peak']),
    ofGravest: row['of_gravest'] === null ? null : Number(row['of_gravest']),
    severity: row['severity'] as Severity | null,
  }));
  let at = 0;
  return civil.map((day) => {
    const from = at;
    while (at < marks.length && marks[at]!.micros < day.endMicros) at++;
    const shown = dayOf(day, marks.slice(from, at), noData);
    return beganMicros !== Infinity && beganMicros > day.startMicros ? { ...shown, beganMicros } : shown;
  });
}

/**
 * Civil days with their instants; each ends where the next begins.
 *
 * @param from first day, `2026-03-29`
 * @param to last day, included
 * @param timeZone IANA name
 * @example civilDays('2026-03-29', '2026-03-29', 'Europe/London')[0] // 23 hours: clocks go forward
 */
export function civilDays(from: string, to: string, timeZone: string): CivilDay[] {
  const [first, last] = [dayNumber(from), dayNumber(to)];
  if (last < first) return [];
  if (last - first + 1 > MAX_DAYS) throw invalid('to', `${last - first + 1} days asked for, at most ${MAX_DAYS}`);
  const offsetAt = offsets(timeZone);
  const starts = Array.from({ length: last - first + 2 }, (_, i) => startOfDay((first + i) * DAY_MS, offsetAt));
  return starts.slice(0, -1).map((start, i) => ({
    day: new Date((first + i) * DAY_MS).toISOString().slice(0, 10),
    startMicros: start * 1000,
    endMicros: starts[i + 1]! * 1000,
  }));
}

/** The day's name in a time zone. */
export function civilDayAt(micros: Micros, timeZone: string): string {
  const ms = Math.floor(micros / 1000);
  return new Date(ms + offsets(timeZone)(ms)).toISOString().slice(0, 10);
}

function dayOf(day: CivilDay, marks: Day['marks'], noData: Day['noData']): Day {
  const peaks = marks.flatMap(({ peak }) => (peak === null ? [] : [peak]));
  const count = (severity: Severity): number => marks.filter((mark) => mark.severity === severity).length;
  return {
    ...day,
    passages: marks.length,
    highest: peaks.length === 0 ? null : peaks.reduce((a, b) => Math.max(a, b)),
    above: { AL: count('AL'), IL: count('IL'), IAL: count('IAL') },
    marks,
    noData: noData
      .filter((hole) => hole.toMicros > day.startMicros && hole.fromMicros < day.endMicros)
      .map((hole) => ({
        fromMicros: Math.max(hole.fromMicros, day.startMicros),
        toMicros: Math.min(hole.toMicros, day.endMicros),
      })),
  };
}

/** Overlapping intervals (of several loggers) become one. Sorted by their beginning. */
function merged(holes: Day['noData']): Day['noData'] {
  const out: Day['noData'] = [];
  for (const hole of holes) {
    const last = out.at(-1);
    if (last !== undefined && hole.fromMicros <= last.toMicros) last.toMicros = Math.max(last.toMicros, hole.toMicros);
    else if (hole.toMicros > hole.fromMicros) out.push({ ...hole });
  }
  return out;
}

/**
 * The first instant of a civil day, ms. Where midnight is skipped by a clock change it is the moment of the change; where
 * it comes twice, the first.
 *
 * @param midnight the day's midnight read as if it were UTC
 */
function startOfDay(midnight: number, offsetAt: (ms: number) => number): number {
  // The offsets in force around the day; with the larger one (further east) the day begins earlier.
  const candidates = [-DAY_MS, 0, DAY_MS].map((shift) => midnight - offsetAt(midnight + shift));
  const exact = candidates.filter((ms) => ms + offsetAt(ms) === midnight);
  if (exact.length > 0) return Math.min(...exact);
  let [before, after] = [Math.min(...candidates) - DAY_MS / 4, Math.max(...candidates) + DAY_MS / 4];
  while (after - before > 1) {
    const middle = Math.floor((before + after) / 2);
    if (middle + offsetAt(middle) >= midnight) after = middle;
    else before = middle;
  }
  return after;
}

/** Local time minus UTC at an instant, ms. */
function offsets(timeZone: string): (ms: number) => number {
  const format = formatOf(timeZone);
  return (ms) => {
    const whole = Math.floor(ms / 1000) * 1000;
    const part = Object.fromEntries(format.formatToParts(whole).map(({ type, value }) => [type, Number(value)]));
    const { year = 0, month = 1, day = 1, hour = 0, minute = 0, second = 0 } = part;
    return Date.UTC(year, month - 1, day, hour, minute, second) - whole;
  };
}

const formats = new Map<string, Intl.DateTimeFormat>();

function formatOf(timeZone: string): Intl.DateTimeFormat {
  let format = formats.get(timeZone);
  if (format !== undefined) return format;
  try {
    format = new Intl.DateTimeFormat('en-GB', {
      timeZone,
      calendar: 'gregory',
      hourCycle: 'h23',
      year: 'numeric',
      month: '2-digit',
      day: '2-digit',
      hour: '2-digit',
      minute: '2-digit',
      second: '2-digit',
    });
  } catch {
    throw invalid('timeZone', `"${timeZone}" is no IANA time zone`);
  }
  formats.set(timeZone, format);
  return format;
}

function dayNumber(text: string): number {
  const ms = /^\d{4}-\d{2}-\d{2}$/.test(text) ? Date.parse(`${text}T00:00:00Z`) : Number.NaN;
  if (Number.isNaN(ms) || new Date(ms).toISOString().slice(0, 10) !== text) throw invalid('day', `"${text}" is no day`);
  return ms / DAY_MS;
}

const invalid = (where: string, detail: string): SpanbeatError =>
  new SpanbeatError({ code: 'REQUEST_INVALID', where, detail });
