import { SpanbeatError } from '#core/contract/errors.ts';
import type { PassagePage, PassageQuery, PassageRow } from '#core/contract/api.ts';
import { isLowerBound, type Measured } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { Severity } from '#core/contract/severity.ts';
import type { Ask, Row, SqlValue } from './database.ts';

const DEFAULT_LIMIT = 100;

const ROW_COLUMNS = `p.id, p.bridge, p.on_micros, p.peak, p.sensor, p.severity, p.of_gravest, p.speed_ms, p.direction,
  p.axles, p.f1_hz, p.zeta1, p.temperature_c, p.quality, a.alarm`;
const FROM_WITH_ALARM = `FROM passages p LEFT JOIN
  (SELECT passage, min(id) AS alarm FROM alarms WHERE passage IS NOT NULL GROUP BY passage) a ON a.passage = p.id`;

/**
 * Puts a passage in. Asking first is several times faster than `ON CONFLICT`, and safe since one writer writes at a time.
 *
 * @returns false where it is there already, and then nothing has changed
 */
export async function insertPassage(ask: Ask, passage: Passage, hasWaveform: boolean): Promise<boolean> {
  if (await hasPassage(ask, passage.id)) return false;
  await ask(
    `INSERT INTO passages (id, bridge, on_micros, start_micros, end_micros, definition_version, peak, sensor, limit_id,
       severity, of_gravest, speed_ms, direction, axles, f1_hz, zeta1, temperature_c, quality, has_waveform, json)
     VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11, $12, $13, $14, $15, $16, $17, $18, $19, $20)`,
    [
      passage.id,
      passage.bridge,
      passage.phases.onMicros,
      passage.startMicros,
      passage.endMicros,
      passage.provenance.definitionVersion,
      passage.peak.measured.value,
      passage.peak.sensor,
      passage.peak.limit,
      passage.peak.severity,
      passage.peak.ofGravest,
      passage.speedMs.value,
      passage.direction,
      wholeOf(passage.axleCount),
      passage.f1Hz.value,
      passage.zeta1.value,
      passage.temperatureC.value,
      passage.quality,
      hasWaveform,
      JSON.stringify(passage),
    ],
  );
  return true;
}

export async function hasPassage(ask: Ask, id: string): Promise<boolean> {
  return (await ask('SELECT 1 AS one FROM passages WHERE id = $1', [id])).length > 0;
}

export async function passageOf(ask: Ask, id: string): Promise<{ passage: Passage; hasWaveform: boolean } | null> {
  const [row] = await ask('SELECT json, has_waveform FROM passages WHERE id = $1', [id]);
  if (row === undefined) return null;
  return { passage: JSON.parse(String(row['json'])) as Passage, hasWaveform: row['has_waveform'] === true };
}

/**
 * One page of a list: newest first, or highest first with those without a peak last. Passages that come in while a
 * viewer turns pages are neither shown twice nor do they push others out: the cursor names the last row, not a number.
 *
 * @throws SpanbeatError REQUEST_INVALID where the cursor is not one of this order
 */
export async function pageOf(ask: Ask, query: PassageQuery): Promise<PassagePage> {
  const { order = 'time', limit = DEFAULT_LIMIT } = query;
  const where = conditions(query);
  const [count] = await ask(`SELECT count(*) AS n FROM passages p ${where.sql()}`, where.values);
  if (query.cursor !== undefined) after(where, order, query.cursor);
  const peakFirst = order === 'peak' ? `${PEAK_KEY} DESC, ` : '';
  const rows = await ask(
    `SELECT ${ROW_COLUMNS} ${FROM_WITH_ALARM} ${where.sql()}
     ORDER BY ${peakFirst}p.on_micros DESC, p.id DESC LIMIT ${where.put(limit + 1)}`,
    where.values,
  );
  const page = await withBounds(ask, rows.slice(0, limit).map(rowOf));
  const last = page.at(-1);
  const next = rows.length > limit && last !== undefined ? cursorOf(order, last) : null;
  return { rows: page, total: Number(count?.['n'] ?? 0), next };
}

/** Earlier passages of the same bridge, direction and axle count, nearest in speed first. */
export async function alikeOf(ask: Ask, passage: Passage, limit: number): Promise<PassageRow[]> {
  const rows = await ask(
    `SELECT ${ROW_COLUMNS} ${FROM_WITH_ALARM}
     WHERE p.bridge = $1 AND p.on_micros < $2 AND p.direction IS NOT DISTINCT FROM $3 AND p.axles IS NOT DISTINCT FROM $4
     ORDER BY coalesce(abs(p.speed_ms - $5), 1e9), p.on_micros DESC, p.id DESC LIMIT $6`,
    [
      passage.bridge,
      passage.phases.onMicros,
      passage.direction,
      wholeOf(passage.axleCount),
      passage.speedMs.value ?? 0,
      limit,
    ],
  );
  return withBounds(ask, rows.map(rowOf));
}

/** The passages just before and after, on the same bridge. */
export async function neighboursOf(ask: Ask, id: string): Promise<{ earlier: string | null; later: string | null }> {
  const beside = async (sign: '<' | '>', direction: 'ASC' | 'DESC'): Promise<string | null> => {
    const [row] = await ask(
      `SELECT p.id FROM passages p, passages here WHERE here.id = $1 AND p.bridge = here.bridge
         AND (p.on_micros ${sign} here.on_micros OR (p.on_micros = here.on_micros AND p.id ${sign} here.id))
       ORDER BY p.on_micros ${direction}, p.id ${direction} LIMIT 1`,
      [id],
    );
    return row === undefined ? null : String(row['id']);
  };
  return { earlier: await beside('<', 'DESC'), later: await beside('>', 'ASC') };
}

/** The newest passage of each bridge. */
export async function lastOf(ask: Ask): Promise<PassageRow[]> {
  const rows = await ask(
    `SELECT ${ROW_COLUMNS} ${FROM_WITH_ALARM}
     JOIN (SELECT bridge, max(on_micros) AS newest FROM passages GROUP BY bridge) l
       ON l.bridge = p.bridge AND l.newest = p.on_micros ORDER BY p.bridge, p.id`,
  );
  return withBounds(ask, rows.map(rowOf));
}

/** Only a poor passage has a lower bound for its peak, so that whole passages are seldom looked into. */
async function withBounds(ask: Ask, rows: PassageRow[]): Promise<PassageRow[]> {
  const poor = rows.filter(({ quality, peak }) => quality === 'poor' && peak !== null).map(({ id }) => id);
  if (poor.length === 0) return rows;
  const asked = poor.map((_, i) => `$${i + 1}`).join(', ');
  const bounds = new Set<string>();
  for (const { json } of await ask(`SELECT json FROM passages WHERE id IN (${asked})`, poor)) {
    const { id, peak } = JSON.parse(String(json)) as Passage;
    if (isLowerBound(peak.measured)) bounds.add(id);
  }
  return rows.map((row) => (bounds.has(row.id) ? { ...row, peakAtLeast: true } : row));
}

function rowOf(row: Row): PassageRow {
  const number = (name: string): number | null => (row[name] === null ? null : Number(row[name]));
  const text = (name: string): string | null => (row[name] === null ? null : String(row[name]));
  return {
    id: String(row['id']),
    bridge: String(row['bridge']),
    onMicros: Number(row['on_micros']),
    peak: number('peak'),
    sensor: text('sensor'),
    severity: text('severity') as Severity | null,
    ofGravest: number('of_gravest'),
    speedMs: number('speed_ms'),
    direction: text('direction') as PassageRow['direction'],
    axles: number('axles'),
    f1Hz: number('f1_hz'),
    zeta1: number('zeta1'),
    temperatureC: number('temperature_c'),
    quality: String(row['quality']),
    alarm: text('alarm'),
  };
}

interface Where {
  values: SqlValue[];
  /** A value's place holder. */
  put(value: SqlValue): string;
  add(clause: string): void;
  sql(): string;
}

function emptyWhere(): Where {
  const values: SqlValue[] = [];
  const clauses: string[] = [];
  return {
    values,
    put: (value) => `$${values.push(value)}`,
    add: (clause) => void clauses.push(clause),
    sql: () => (clauses.length === 0 ? '' : `WHERE ${clauses.join(' AND ')}`),
  };
}

function conditions(query: PassageQuery): Where {
  const where = emptyWhere();
  const add = (value: SqlValue | undefined, column: string, sign: string): void => {
    if (value !== undefined) where.add(`p.${column} ${sign} ${where.put(value)}`);
  };
  add(query.bridge, 'bridge', '=');
  add(query.fromMicros, 'on_micros', '>=');
  add(query.toMicros, 'on_micros', '<');
  add(query.minPeak, 'peak', '>=');
  add(query.maxPeak, 'peak', '<=');
  add(query.minSpeed, 'speed_ms', '>=');
  add(query.maxSpeed, 'speed_ms', '<=');
  add(query.direction, 'direction', '=');
  add(query.quality, 'quality', '=');
  return where;
}

/** Magnitudes are never negative, so −1 stands for "no peak" and sorts behind all. */
const PEAK_KEY = 'coalesce(p.peak, -1)';

function cursorOf(order: 'time' | 'peak', row: PassageRow): string {
  const key = order === 'time' ? [row.onMicros, row.id] : [row.peak ?? -1, row.onMicros, row.id];
  return Buffer.from(JSON.stringify(key)).toString('base64url');
}

function after(where: Where, order: 'time' | 'peak', cursor: string): void {
  const key = parseCursor(cursor, order === 'time' ? 2 : 3);
  const [id, micros, peak] = key.toReversed();
  const sameTime = `p.on_micros = ${where.put(micros ?? null)} AND p.id < ${where.put(id ?? null)}`;
  const byTime = `(p.on_micros < ${where.put(micros ?? null)} OR (${sameTime}))`;
  if (order === 'time') {
    where.add(byTime);
    return;
  }
  where.add(`(${PEAK_KEY} < ${where.put(peak ?? null)} OR (${PEAK_KEY} = ${where.put(peak ?? null)} AND ${byTime}))`);
}

function parseCursor(cursor: string, length: number): (string | number)[] {
  try {
    const key: unknown = JSON.parse(Buffer.from(cursor, 'base64url').toString('utf8'));
    if (Array.isArray(key) && key.length === length && key.every(isKeyPart) && typeof key.at(-1) === 'string')
      return key;
  } catch {
    // no JSON: the complaint below says it
  }
  throw new SpanbeatError({
    code: 'REQUEST_INVALID',
    where: 'cursor',
    detail: 'it is not the `next` of a page in this order',
  });
}

const isKeyPart = (part: unknown, index: number, all: unknown[]): part is string | number =>
  index === all.length - 1 ? typeof part === 'string' : typeof part === 'number' && Number.isFinite(part);

const wholeOf = (measured: Measured): number | null => (measured.value === null ? null : Math.round(measured.value));
