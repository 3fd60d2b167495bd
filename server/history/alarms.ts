import type { AlarmQuery } from '#core/contract/api.ts';
import type { Alarm } from '#core/contract/alarm.ts';
import type { NoData, PassageAbove } from '#core/alarm/state.ts';
import type { Micros } from '#core/contract/time.ts';
import type { Ask, SqlValue } from './database.ts';

const DEFAULT_LIMIT = 200;

/**
 * Stores alarms as they now are. One with fewer steps than the stored one is an echo of the past (a replay into a desk that
 * had forgotten it) and changes nothing: an answer is never lost.
 */
export async function upsertAlarms(ask: Ask, alarms: readonly Alarm[]): Promise<void> {
  for (const alarm of alarms) {
    const { id, bridge, kind, rule, state, severity, raisedMicros, passage, steps } = alarm;
    const [known] = await ask('SELECT steps FROM alarms WHERE id = $1', [id]);
    const json = JSON.stringify(alarm);
    if (known === undefined) {
      await ask(
        `INSERT INTO alarms (id, bridge, kind, rule, state, severity, raised_micros, passage, steps, json)
         VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9, $10)`,
        [id, bridge, kind, rule, state, severity, raisedMicros, passage, steps.length, json],
      );
    } else if (Number(known['steps']) <= steps.length) {
      await ask('UPDATE alarms SET state = $2, severity = $3, passage = $4, steps = $5, json = $6 WHERE id = $1', [
        id,
        state,
        severity,
        passage,
        steps.length,
        json,
      ]);
    }
  }
}

/** Newest first. */
export async function alarmsOf(ask: Ask, query: AlarmQuery): Promise<Alarm[]> {
  const values: SqlValue[] = [];
  const clauses: string[] = [];
  const add = (value: SqlValue | undefined, clause: (place: string) => string): void => {
    if (value !== undefined) clauses.push(clause(`$${values.push(value)}`));
  };
  add(query.bridge, (place) => `bridge = ${place}`);
  add(query.fromMicros, (place) => `raised_micros >= ${place}`);
  add(query.toMicros, (place) => `raised_micros < ${place}`);
  if (query.which === 'open') clauses.push(`state <> 'normal'`);
  const where = clauses.length === 0 ? '' : `WHERE ${clauses.join(' AND ')}`;
  const limit = `$${values.push(query.limit ?? DEFAULT_LIMIT)}`;
  return parsed(ask, `SELECT json FROM alarms ${where} ORDER BY raised_micros DESC, id DESC LIMIT ${limit}`, values);
}

/** All that are not back to normal and answered, newest first. */
export async function openAlarmsOf(ask: Ask): Promise<Alarm[]> {
  return parsed(ask, `SELECT json FROM alarms WHERE state <> 'normal' ORDER BY raised_micros DESC, id DESC`, []);
}

/** What the desk of a bridge begins with: all open alarms, and the newest closed ones so that a replay joins them. */
export async function deskAlarmsOf(ask: Ask, bridge: string, closed: number): Promise<Alarm[]> {
  const open = await parsed(ask, `SELECT json FROM alarms WHERE bridge = $1 AND state <> 'normal'`, [bridge]);
  const done = await parsed(
    ask,
    `SELECT json FROM alarms WHERE bridge = $1 AND state = 'normal' ORDER BY raised_micros DESC, id DESC LIMIT $2`,
    [bridge, closed],
  );
  return [...open, ...done];
}

export async function alarmOf(ask: Ask, id: string): Promise<Alarm | null> {
  return (await parsed(ask, 'SELECT json FROM alarms WHERE id = $1', [id]))[0] ?? null;
}

export async function alarmsOfPassage(ask: Ask, passage: string): Promise<Alarm[]> {
  return parsed(ask, 'SELECT json FROM alarms WHERE passage = $1 ORDER BY raised_micros, id', [passage]);
}

/** Says in a stored passage's text that no train was recognised; such a one is no passage above a limit. */
const NO_TRAIN = '%"foundBy":"live level"%';

/** Passages above a limit since a time, by the record: what the desk counts in "in the day before". */
export async function passagesAboveOf(ask: Ask, bridge: string, sinceMicros: Micros): Promise<PassageAbove[]> {
  const rows = await ask(
    `SELECT id, limit_id, on_micros FROM passages
     WHERE bridge = $1 AND on_micros >= $2 AND severity IS NOT NULL AND limit_id IS NOT NULL AND json NOT LIKE $3
     ORDER BY on_micros`,
    [bridge, sinceMicros, NO_TRAIN],
  );
  return rows.map((row) => ({
    limit: String(row['limit_id']),
    passage: String(row['id']),
    micros: Number(row['on_micros']),
  }));
}

/**
 * Stores an interval without data. One that lasts (`toMicros` null) is begun unless the logger has one that lasts; one with
 * an end ends the lasting one, whenever that began.
 */
export async function saveNoDataOf(ask: Ask, { bridge, logger, fromMicros, toMicros }: NoData): Promise<void> {
  const [lasting] = await ask(
    'SELECT from_micros FROM no_data WHERE bridge = $1 AND logger = $2 AND to_micros IS NULL',
    [bridge, logger],
  );
  if (lasting !== undefined) {
    if (toMicros === null) return;
    const end = Math.max(toMicros, Number(lasting['from_micros']));
    await ask('UPDATE no_data SET to_micros = $3 WHERE bridge = $1 AND logger = $2 AND to_micros IS NULL', [
      bridge,
      logger,
      end,
    ]);
    return;
  }
  await ask(
    `INSERT INTO no_data (bridge, logger, from_micros, to_micros) VALUES ($1, $2, $3, $4)
     ON CONFLICT (bridge, logger, from_micros) DO UPDATE SET to_micros = coalesce(no_data.to_micros, excluded.to_micros)`,
    [bridge, logger, fromMicros, toMicros],
  );
}

export async function noDataOf(ask: Ask, bridge: string, fromMicros: Micros, toMicros: Micros): Promise<NoData[]> {
  const rows = await ask(
    `SELECT logger, from_micros, to_micros FROM no_data
     WHERE bridge = $1 AND from_micros < $3 AND (to_micros IS NULL OR to_micros > $2) ORDER BY from_micros, logger`,
    [bridge, fromMicros, toMicros],
  );
  return rows.map((row) => ({
    bridge,
    logger: String(row['logger']),
    fromMicros: Number(row['from_micros']),
    toMicros: row['to_micros'] === null ? null : Number(row['to_micros']),
  }));
}

async function parsed(ask: Ask, sql: string, values: readonly SqlValue[]): Promise<Alarm[]> {
  return (await ask(sql, values)).map((row) => JSON.parse(String(row['json'])) as Alarm);
}
