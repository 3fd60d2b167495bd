import {
  DuckDBInstance,
  DuckDBListVector,
  type DuckDBConnection,
  type DuckDBResult,
  type DuckDBValue,
  type DuckDBVector,
} from '@duckdb/node-api';
import { Value } from 'typebox/value';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';
import { SpanbeatError, type ErrorCode } from '#core/contract/errors.ts';
import { Passage } from '#core/contract/passage.ts';
import { EARLIEST_MICROS, LATEST_MICROS, sampleMicros } from '#core/contract/time.ts';
import { SI_UNIT } from '#core/contract/units.ts';
import { createAssembly } from './assembly.ts';
import { columnName, matchColumns } from './column.ts';
import type { Recording, RecordingOptions } from './recording.ts';

/**
 * Opens a Parquet recording of one of two forms:
 *
 * - a passage's wave form as this program archives it, one row a run: `sensor`, `start_micros`, `rate_hz`,
 *   `samples FLOAT[]`; samples are calibrated, in SI; the passage itself is among the file's metadata;
 * - a plain table: a time column and one column a sensor, named as in CSV, in order of time.
 *
 * @throws SpanbeatError RECORDING_…, UNIT_UNKNOWN; while the blocks flow also RATE_WRONG
 */
export async function openParquet(
  file: string,
  definition: BridgeDefinition,
  options: RecordingOptions,
): Promise<Recording> {
  const instance = await DuckDBInstance.create(':memory:', { threads: '1', memory_limit: '512MB' });
  const connection = await instance.connect();
  const close = (): void => {
    connection.closeSync();
    instance.closeSync();
  };
  try {
    const names = await columnsOf(connection, file);
    const archived = ['sensor', 'start_micros', 'rate_hz', 'samples'].every((name) => names.includes(name));
    return archived
      ? await openArchived(connection, file, definition, close)
      : await openTable(connection, file, names, definition, options, close);
  } catch (error) {
    close();
    throw readable(error, file);
  }
}

async function columnsOf(connection: DuckDBConnection, file: string): Promise<string[]> {
  const reader = await connection.runAndReadAll(`DESCRIBE SELECT * FROM read_parquet(${quoted(file)})`);
  return reader.getRows().map(([name]) => String(name));
}

// one row a run

async function openArchived(
  connection: DuckDBConnection,
  file: string,
  definition: BridgeDefinition,
  close: () => void,
): Promise<Recording> {
  const reader = await connection.runAndReadAll(
    `SELECT sensor, min(rate_hz), max(rate_hz), count(start_micros) FROM read_parquet(${quoted(file)}) GROUP BY sensor ORDER BY sensor`,
  );
  const byId = new Map(definition.sensors.map((sensor) => [sensor.id, sensor]));
  const sensors: Sensor[] = [];
  const unknown: string[] = [];
  for (const [id, least, most, runs] of reader.getRows()) {
    const sensor = byId.get(String(id));
    if (sensor === undefined) unknown.push(String(id));
    else if (Number(least) !== sensor.rateHz || Number(most) !== sensor.rateHz) {
      fail('RATE_WRONG', file, `sensor ${sensor.id}: found ${Number(least)} Hz, expected ${sensor.rateHz} Hz`);
    } else if (Number(runs) > 0) sensors.push(sensor);
  }
  if (sensors.length === 0) {
    const found = unknown.length === 0 ? 'no samples (the file may have been thinned)' : unknown.join(', ');
    fail('RECORDING_NO_CHANNEL', file, `found ${found}; sensors are ${[...byId.keys()].join(', ')}`);
  }
  return {
    file,
    units: new Map(sensors.map(({ id, quantity }) => [id, SI_UNIT[quantity]])),
    sensors: sensors.map(({ id }) => id),
    notes: unknown.length === 0 ? [] : [`${file}: passed over ${unknown.map((name) => `"${name}"`).join(', ')}`],
    passage: await storedPassage(connection, file, definition.id),
    blocks: guarded(archivedBlocks(connection, file, definition.id, byId), file, close),
  };
}

/** What the archive wrote beside the samples; null where the file comes from elsewhere. */
async function storedPassage(connection: DuckDBConnection, file: string, bridge: string): Promise<Passage | null> {
  const reader = await connection.runAndReadAll(
    `SELECT decode(value) FROM parquet_kv_metadata(${quoted(file)}) WHERE decode(key) = 'passage'`,
  );
  const text = reader.getRows()[0]?.[0];
  if (typeof text !== 'string') return null;
  const passage: unknown = JSON.parse(text);
  if (!Value.Check(Passage, passage))
    fail('RECORDING_FORMAT', file, 'its passage is not of the form this version reads');
  if (passage.bridge !== bridge) {
    fail('RECORDING_NO_CHANNEL', file, `found a passage of bridge "${passage.bridge}", expected "${bridge}"`);
  }
  return passage;
}

/** Pieces of runs cut to a second or so and put in order of time: a run may be minutes long. */
const PIECE_SECONDS = 1;

async function* archivedBlocks(
  connection: DuckDBConnection,
  file: string,
  bridge: string,
  byId: ReadonlyMap<string, Sensor>,
): AsyncGenerator<SampleBlock> {
  // One passage: minutes at most, so all of it is in memory while it is put in order.
  const result = await connection.run(
    `SELECT sensor, start_micros, samples FROM read_parquet(${quoted(file)}) WHERE start_micros IS NOT NULL`,
  );
  const blocks: SampleBlock[] = [];
  for await (const { columns, rowCount } of chunksOf(result)) {
    const lists = columns[2];
    if (!(lists instanceof DuckDBListVector)) fail('RECORDING_FORMAT', file, 'column samples is no list of FLOAT');
    for (let row = 0; row < rowCount; row++) {
      const sensor = byId.get(String(columns[0]!.getItem(row)));
      if (sensor === undefined) continue;
      const values = lists.childVector;
      const from = lists.getEntryOffset(row);
      const samples = Float64Array.from({ length: lists.getEntryLength(row) }, (_, i) =>
        numberOf(values.getItem(from + i)),
      );
      const piece = Math.max(1, Math.floor(PIECE_SECONDS * sensor.rateHz));
      for (let at = 0; at < samples.length; at += piece) {
        blocks.push({
          bridge,
          logger: sensor.logger,
          sequence: null,
          startMicros: sampleMicros(Number(columns[1]!.getItem(row)), at, sensor.rateHz),
          rateHz: sensor.rateHz,
          channels: [{ sensor: sensor.id, samples: samples.slice(at, at + piece) }],
        });
      }
    }
  }
  yield* blocks.sort((a, b) => a.startMicros - b.startMicros);
}

// a plain table

async function openTable(
  connection: DuckDBConnection,
  file: string,
  names: readonly string[],
  definition: BridgeDefinition,
  options: RecordingOptions,
  close: () => void,
): Promise<Recording> {
  const columns = matchColumns(names.map(columnName), definition, file);
  const sensors = columns.sensors.map(({ sensor }) => sensor);
  const timeName = named(names[columns.time.at]!);
  const micros = await timeSql(connection, file, timeName, columns.time.unit, options);
  const values = columns.sensors.map(({ at }) => `CAST(${named(names[at]!)} AS DOUBLE)`);
  const sql = `SELECT ${micros}, ${values.join(', ')} FROM read_parquet(${quoted(file)})`;
  const { unknown } = columns;
  return {
    file,
    units: new Map(columns.sensors.flatMap(({ sensor, unit }) => (unit === null ? [] : [[sensor.id, unit] as const]))),
    sensors: sensors.map(({ id }) => id),
    notes: unknown.length === 0 ? [] : [`${file}: passed over ${unknown.map((name) => `"${name}"`).join(', ')}`],
    passage: null,
    blocks: guarded(tableBlocks(connection, sql, definition.id, sensors, file), file, close),
  };
}

async function* tableBlocks(
  connection: DuckDBConnection,
  sql: string,
  bridge: string,
  sensors: readonly Sensor[],
  file: string,
): AsyncGenerator<SampleBlock> {
  const assembly = createAssembly(bridge, sensors, file);
  const row = new Float64Array(sensors.length);
  const present = new Uint8Array(sensors.length);
  let rows = 0;
  for await (const { columns, rowCount } of chunksOf(await connection.stream(sql))) {
    for (let at = 0; at < rowCount; at++) {
      const time = columns[0]!.getItem(at);
      if (time === null) fail('RECORDING_TIME', file, `row ${rows + at + 1}: found no time`);
      for (let place = 0; place < row.length; place++) {
        const value = columns[place + 1]!.getItem(at);
        present[place] = value === null ? 0 : 1;
        row[place] = numberOf(value);
      }
      assembly.add(numberOf(time), row, present, 1);
    }
    rows += rowCount;
    yield* assembly.take(false);
  }
  if (rows === 0) fail('RECORDING_FORMAT', file, 'found no row');
  yield* assembly.take(true);
}

/** SQL for the time in µs, by the column's type and, for numbers, the size of its first value. */
async function timeSql(
  connection: DuckDBConnection,
  file: string,
  column: string,
  unit: string | null,
  { startMicros }: RecordingOptions,
): Promise<string> {
  const reader = await connection.runAndReadAll(
    `SELECT typeof(${column}), TRY_CAST(${column} AS DOUBLE) FROM read_parquet(${quoted(file)}) LIMIT 1`,
  );
  const [type, first] = reader.getRows()[0] ?? fail('RECORDING_FORMAT', file, 'found no row');
  const typeName = String(type);
  if (typeName.startsWith('TIMESTAMP')) return `CAST(epoch_us(${column}) AS DOUBLE)`;
  if (typeName === 'VARCHAR') return `CAST(epoch_us(CAST(${column} AS TIMESTAMP)) AS DOUBLE)`;
  if (first === null || first === undefined) {
    fail('RECORDING_TIME', file, `column ${column}: found ${typeName}, expected a timestamp or a number`);
  }
  const known: Readonly<Record<string, number>> = { s: 1e6, ms: 1e3, us: 1, µs: 1, ns: 1e-3 };
  const given = unit === null ? undefined : known[unit.toLowerCase()];
  for (const unitMicros of given === undefined ? [1e6, 1e3, 1, 1e-3] : [given]) {
    const micros = Number(first) * unitMicros;
    if (micros >= EARLIEST_MICROS && micros <= LATEST_MICROS) return `CAST(${column} AS DOUBLE) * ${unitMicros}`;
  }
  if (startMicros === null) {
    fail(
      'RECORDING_TIME',
      file,
      `column ${column} counts from an unknown start; expected --start with the time of zero`,
    );
  }
  return `CAST(${column} AS DOUBLE) * ${given ?? 1e6} + ${startMicros}`;
}

// both

interface Chunk {
  columns: DuckDBVector[];
  rowCount: number;
}

async function* chunksOf(result: DuckDBResult): AsyncGenerator<Chunk> {
  for (;;) {
    const chunk = await result.fetchChunk();
    if (chunk === null || chunk.rowCount === 0) return;
    const columns = Array.from({ length: result.columnCount }, (_, column) => chunk.getColumnVector(column));
    yield { columns, rowCount: chunk.rowCount };
  }
}

async function* guarded(
  blocks: AsyncGenerator<SampleBlock>,
  file: string,
  close: () => void,
): AsyncGenerator<SampleBlock> {
  try {
    yield* blocks;
  } catch (error) {
    throw readable(error, file);
  } finally {
    close();
  }
}

function readable(error: unknown, file: string): SpanbeatError {
  if (error instanceof SpanbeatError) return error;
  const detail = (error instanceof Error ? error.message : String(error)).split('\n')[0] ?? '';
  return new SpanbeatError({ code: 'RECORDING_FORMAT', where: file, detail });
}

const numberOf = (value: DuckDBValue): number => (value === null ? NaN : Number(value));

const quoted = (text: string): string => `'${text.replaceAll("'", "''")}'`;

const named = (column: string): string => `"${column.replaceAll('"', '""')}"`;

function fail(code: ErrorCode, where: string, detail: string): never {
  throw new SpanbeatError({ code, where, detail });
}
