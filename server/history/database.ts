import {
  DuckDBInstance,
  type DuckDBConnection,
  type DuckDBPreparedStatement,
  type DuckDBResult,
} from '@duckdb/node-api';

export type SqlValue = string | number | boolean | null;
export type Row = Record<string, SqlValue>;

/** Rows of one statement; 64-bit integers come as numbers (all of ours are below 2^53). */
export type Ask = (sql: string, values?: readonly SqlValue[]) => Promise<Row[]>;

/**
 * The few things the history asks of a database. SQL is the common part of DuckDB and PostgreSQL: `$1` parameters, times as
 * BIGINT microseconds, JSON as TEXT, `ON CONFLICT`.
 */
export interface Database {
  /** Reads, at any time. */
  ask: Ask;
  /** All or nothing. Callers see to it that only one runs at a time. */
  transaction<T>(work: (ask: Ask) => Promise<T>): Promise<T>;
  /** Opens it anew where a failure has made it unusable. */
  revive(): Promise<void>;
  close(): void;
}

/** Memory that DuckDB may use for pages and sorting; beyond, it works on disk. */
const MEMORY_LIMIT = '512MB';

/** A DuckDB file, made where there is none. @throws what DuckDB says where it cannot be opened */
export async function openDuckDb(file: string): Promise<Database> {
  let open = await connect(file);
  let closed = false;
  const shut = (): void => {
    open.reader.closeSync();
    open.writer.closeSync();
    open.instance.closeSync();
  };

  return {
    ask: (sql, values) => rowsOf(open.reader, sql, values),
    async transaction(work) {
      const { writer, prepared } = open;
      await writer.run('BEGIN TRANSACTION');
      try {
        const result = await work((sql, values) => preparedRows(writer, prepared, sql, values));
        await writer.run('COMMIT');
        return result;
      } catch (failure) {
        // A failed commit has rolled back by itself; then this fails too, and the first failure is the one to tell.
        await writer.run('ROLLBACK').catch(() => undefined);
        throw failure;
      }
    },
    async revive() {
      if (closed) return;
      try {
        await rowsOf(open.writer, 'SELECT 1 AS one');
        await rowsOf(open.reader, 'SELECT count(*) AS n FROM meta');
      } catch {
        shut();
        open = await connect(file);
      }
    },
    close() {
      if (closed) return;
      closed = true;
      shut();
    },
  };
}

interface Open {
  instance: DuckDBInstance;
  /** Apart, so that a long query does not hold up a commit. */
  reader: DuckDBConnection;
  writer: DuckDBConnection;
  /** Of the writer, by their text: our statements are few, and planning one takes longer than running it. */
  prepared: Map<string, DuckDBPreparedStatement>;
}

async function connect(file: string): Promise<Open> {
  // One thread: a commit is a few rows, and handing it to more costs longer than it takes.
  const instance = await DuckDBInstance.create(file, { threads: '1', memory_limit: MEMORY_LIMIT });
  return { instance, reader: await instance.connect(), writer: await instance.connect(), prepared: new Map() };
}

async function rowsOf(connection: DuckDBConnection, sql: string, values: readonly SqlValue[] = []): Promise<Row[]> {
  return fetched(await connection.run(sql, [...values]));
}

async function preparedRows(
  connection: DuckDBConnection,
  prepared: Map<string, DuckDBPreparedStatement>,
  sql: string,
  values: readonly SqlValue[] = [],
): Promise<Row[]> {
  const statement = prepared.get(sql) ?? (await connection.prepare(sql));
  if (values.length > 0) prepared.set(sql, statement); // the others are run once, to bring up the schema
  statement.bind([...values]);
  return fetched(await statement.run());
}

async function fetched(result: DuckDBResult): Promise<Row[]> {
  const names = result.columnNames();
  const rows: Row[] = [];
  for (;;) {
    const chunk = await result.fetchChunk();
    if (chunk === null || chunk.rowCount === 0) return rows;
    for (const values of chunk.getRows()) {
      rows.push(Object.fromEntries(names.map((name, column) => [name, plain(values[column])])));
    }
  }
}

function plain(value: unknown): SqlValue {
  if (typeof value === 'bigint') return Number(value);
  if (value === null || typeof value === 'string' || typeof value === 'number' || typeof value === 'boolean')
    return value;
  throw new TypeError(`a column of a type that the history does not use: ${typeof value}`);
}
