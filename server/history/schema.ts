import { SpanbeatError } from '#core/contract/errors.ts';
import type { Ask, Database } from './database.ts';

/** Each entry brings a database of the version before it to its own; never change one that was delivered. */
const MIGRATIONS: readonly (readonly string[])[] = [
  [
    `CREATE TABLE definitions (
       bridge TEXT NOT NULL, version INTEGER NOT NULL, since_micros BIGINT NOT NULL, text TEXT NOT NULL, json TEXT NOT NULL,
       PRIMARY KEY (bridge, version))`,
    `CREATE TABLE passages (
       id TEXT PRIMARY KEY, bridge TEXT NOT NULL, on_micros BIGINT NOT NULL, start_micros BIGINT NOT NULL,
       end_micros BIGINT NOT NULL, definition_version INTEGER NOT NULL,
       peak DOUBLE PRECISION, sensor TEXT, limit_id TEXT, severity TEXT, of_gravest DOUBLE PRECISION,
       speed_ms DOUBLE PRECISION, direction TEXT, axles INTEGER, f1_hz DOUBLE PRECISION, zeta1 DOUBLE PRECISION,
       temperature_c DOUBLE PRECISION, quality TEXT NOT NULL, has_waveform BOOLEAN NOT NULL, json TEXT NOT NULL)`,
    `CREATE TABLE alarms (
       id TEXT PRIMARY KEY, bridge TEXT NOT NULL, kind TEXT NOT NULL, rule TEXT NOT NULL, state TEXT NOT NULL,
       severity TEXT NOT NULL, raised_micros BIGINT NOT NULL, passage TEXT, steps INTEGER NOT NULL, json TEXT NOT NULL)`,
    `CREATE TABLE no_data (
       bridge TEXT NOT NULL, logger TEXT NOT NULL, from_micros BIGINT NOT NULL, to_micros BIGINT,
       PRIMARY KEY (bridge, logger, from_micros))`,
  ],
];

const SCHEMA_VERSION = MIGRATIONS.length;

/**
 * Brings the database to this program's schema.
 *
 * @returns whether the database still has to be filled from the archive: it is new, or filling it was cut short
 * @throws SpanbeatError STORE_NEWER where a newer program has written it
 */
export async function migrate(database: Database): Promise<boolean> {
  return database.transaction(async (ask) => {
    await ask('CREATE TABLE IF NOT EXISTS meta (name TEXT PRIMARY KEY, value TEXT NOT NULL)');
    const version = Number((await meta(ask, 'schema')) ?? 0);
    if (version > SCHEMA_VERSION) {
      throw new SpanbeatError({
        code: 'STORE_NEWER',
        detail: `the history has schema ${version}, this program knows up to ${SCHEMA_VERSION}`,
      });
    }
    for (const statements of MIGRATIONS.slice(version)) {
      for (const statement of statements) await ask(statement);
    }
    if (version !== SCHEMA_VERSION) await setMeta(ask, 'schema', String(SCHEMA_VERSION));
    return (await meta(ask, 'filled')) !== 'yes';
  });
}

/** Reads a little of all that is small, so that damage is met at the start and not in the night. */
export async function probe(ask: Ask): Promise<void> {
  await ask('SELECT sum(length(json)) AS n FROM definitions');
  await ask('SELECT sum(length(json)) AS n FROM alarms');
  await ask('SELECT count(*) AS n, max(to_micros) AS newest FROM no_data');
  await ask(
    'SELECT max(id) AS id, max(on_micros) AS newest, max(peak) AS highest, max(speed_ms) AS fastest FROM passages',
  );
}

export async function markFilled(ask: Ask): Promise<void> {
  await setMeta(ask, 'filled', 'yes');
}

async function meta(ask: Ask, name: string): Promise<string | null> {
  const [row] = await ask('SELECT value FROM meta WHERE name = $1', [name]);
  return row === undefined ? null : String(row['value']);
}

async function setMeta(ask: Ask, name: string, value: string): Promise<void> {
  await ask('INSERT INTO meta (name, value) VALUES ($1, $2) ON CONFLICT (name) DO UPDATE SET value = excluded.value', [
    name,
    value,
  ]);
}
