import { createReadStream } from 'node:fs';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { SpanbeatError, type ErrorCode } from '#core/contract/errors.ts';
import { createAssembly, type Assembly } from './assembly.ts';
import { checkUnit, columnName, matchColumns, type Columns, type ColumnName } from './column.ts';
import { decimalAt } from './decimal.ts';
import { createLineSource, type Line, type LineSource } from './line.ts';
import type { Recording, RecordingOptions } from './recording.ts';
import { resolutionMicros, settleTime, timeAt, type TimeReading } from './time-text.ts';

/** Columns of one file. */
const LIMIT_COLUMNS = 2048;

/** What the head of the file settled. */
interface Head {
  separator: number;
  decimalComma: boolean;
  columns: Columns;
  /** What each field of a row is: -1 nothing, -2 the time, from 0 a place in the row's values. */
  roles: Int32Array;
  names: ColumnName[];
}

/**
 * Opens a text recording: a header, a time column, one column a sensor.
 *
 * Fields are separated by tab, semicolon or comma (whichever the header has, in this order); where it is not the comma,
 * a comma may be the decimal mark. Units stand in the header, `A1 [g]`, or in a row of their own under it; a column
 * without one holds what the logger sent. Lines that are blank or begin with `#`, `%` or `//` are passed over, as are
 * columns that are no sensor. Times: see time-text.ts.
 *
 * @throws SpanbeatError with file and line; while the blocks flow too
 */
export async function openCsv(
  file: string,
  definition: BridgeDefinition,
  options: RecordingOptions,
): Promise<Recording> {
  const lines = createLineSource(createReadStream(file, { highWaterMark: 1 << 18 }), file);
  const head = await readHead(lines, file, definition);
  const notes: string[] = [];
  const { unknown } = head.columns;
  if (unknown.length > 0) notes.push(`${file}: passed over ${unknown.map((name) => `"${name}"`).join(', ')}`);
  const first = await nextLine(lines);
  const units = first === null ? false : takeUnitRow(head, first, file);
  return {
    file,
    units: new Map(
      head.columns.sensors.flatMap(({ sensor, unit }) => (unit === null ? [] : [[sensor.id, unit] as const])),
    ),
    sensors: head.columns.sensors.map(({ sensor }) => sensor.id),
    notes,
    passage: null,
    blocks: rows({ head, lines, file, definition, options, notes, first: units ? null : first }),
  };
}

interface Reading {
  head: Head;
  lines: LineSource;
  file: string;
  definition: BridgeDefinition;
  options: RecordingOptions;
  notes: string[];
  first: Line | null;
}

async function* rows(reading: Reading): AsyncGenerator<SampleBlock> {
  const { head, lines, file, definition, notes } = reading;
  const assembly = createAssembly(
    definition.id,
    head.columns.sensors.map(({ sensor }) => sensor),
    file,
  );
  const take = createRowReader(reading, assembly);
  let count = 0;
  try {
    let line = reading.first;
    for (;;) {
      line ??= lines.take();
      if (line === null) {
        yield* assembly.take(false);
        if (await lines.refill()) continue;
        break;
      }
      try {
        take(line);
      } catch (error) {
        // A logger that lost power leaves half a line; what came before is sound.
        if (!(error instanceof SpanbeatError) || !line.torn || count === 0) throw error;
        notes.push(`${file}:${line.number}: the last line is cut and was left out`);
        break;
      }
      count++;
      line = null;
    }
  } finally {
    await lines.close();
  }
  if (count === 0) fail('RECORDING_FORMAT', file, 'found a header and no row under it');
  yield* assembly.take(true);
}

/** Returns the function that takes one line; it settles the way times are written on the first. */
function createRowReader({ head, file, options }: Reading, assembly: Assembly): (line: Line) => void {
  const { roles, separator, decimalComma, columns } = head;
  const values = new Float64Array(columns.sensors.length);
  const present = new Uint8Array(values.length);
  let time: TimeReading | null = null;
  return (line) => {
    const { bytes, from, to } = line;
    let field = 0;
    let start = from;
    let micros = NaN;
    present.fill(0);
    for (let at = from; at <= to; at++) {
      if (at < to && bytes[at] !== separator) continue;
      const role = roles[field];
      if (role === undefined) {
        if (at > start) fail('RECORDING_FORMAT', placeOf(file, line), tooMany(head, field + 1));
      } else if (role >= 0) {
        const value = decimalAt(bytes, start, at, decimalComma);
        if (value === null) {
          const found = textOf(bytes, start, at);
          fail(
            'RECORDING_FORMAT',
            placeOf(file, line),
            `column ${head.names[field]?.name ?? ''}: found "${found}", expected a number`,
          );
        }
        present[role] = value === undefined ? 0 : 1;
        values[role] = value ?? NaN;
      } else if (role === TIME) {
        time ??= settle(head, line, start, at, file, options);
        micros = timeAt(time, bytes, start, at);
      }
      field++;
      start = at + 1;
    }
    if (line.torn && field < roles.length) fail('RECORDING_FORMAT', placeOf(file, line), 'the line is cut');
    if (time === null || Number.isNaN(micros)) {
      fail(
        'RECORDING_TIME',
        placeOf(file, line),
        `found "${textOf(bytes, from, Math.min(to, from + 60))}", expected a time like those above`,
      );
    }
    assembly.add(micros, values, present, resolutionMicros(time));
  };
}

function settle(
  head: Head,
  line: Line,
  from: number,
  to: number,
  file: string,
  options: RecordingOptions,
): TimeReading {
  const { columns, decimalComma } = head;
  const settled = settleTime(line.bytes, from, to, {
    unit: columns.time.unit,
    startMicros: options.startMicros,
    decimalComma,
  });
  const found = textOf(line.bytes, from, to);
  if (settled === 'no start') {
    fail(
      'RECORDING_TIME',
      placeOf(file, line),
      `found "${found}", which counts from an unknown start; expected --start with the time of zero`,
    );
  }
  if (settled === null) {
    fail(
      'RECORDING_TIME',
      placeOf(file, line),
      `found "${found}", expected seconds, a Unix epoch, or ISO 8601 with date and time`,
    );
  }
  return settled;
}

const TIME = -2;

async function readHead(lines: LineSource, file: string, definition: BridgeDefinition): Promise<Head> {
  const line = await nextLine(lines);
  if (line === null) fail('RECORDING_FORMAT', file, 'found no line, expected a header');
  const where = placeOf(file, line);
  const text = decodeHeader(line.bytes.subarray(line.from, line.to));
  const separator = ['\t', ';', ','].find((candidate) => split(text, candidate).length > 1);
  if (separator === undefined)
    fail(
      'RECORDING_FORMAT',
      where,
      `found "${text.slice(0, 60)}", expected columns with tab, semicolon or comma between them`,
    );
  const names = split(text, separator).map(columnName);
  if (names.length > LIMIT_COLUMNS)
    fail('RECORDING_FORMAT', where, `found ${names.length} columns, expected at most ${LIMIT_COLUMNS}`);
  if (names.every(({ name }) => name === '' || /^[\d.,eE+:\-TZ ]+$/.test(name))) {
    fail('RECORDING_FORMAT', where, 'found numbers in the first line, expected a header with names');
  }
  const columns = matchColumns(names, definition, where);
  const roles = new Int32Array(names.length).fill(-1);
  roles[columns.time.at] = TIME;
  columns.sensors.forEach(({ at }, place) => (roles[at] = place));
  return { separator: separator.charCodeAt(0), decimalComma: separator !== ',', columns, roles, names };
}

/** A row of units has text, and nothing else, where the time and the values belong. Its units enter the columns. */
function takeUnitRow(head: Head, line: Line, file: string): boolean {
  const fields = split(decodeHeader(line.bytes.subarray(line.from, line.to)), String.fromCharCode(head.separator));
  const told = fields.map((field) => field.replace(/^[[(]|[\])]$/g, '').trim());
  const sensorAt = new Map(head.columns.sensors.map(({ at, sensor }) => [at, sensor]));
  const isNumber = (field: string, at: number): boolean =>
    /^[+-]?[.,]?\d/.test(field) && !(field === '1' && sensorAt.get(at)?.quantity === 'axle detector');
  if (told.every((field) => field === '') || told.some(isNumber)) return false;
  const time = told[head.columns.time.at] ?? '';
  if (/\d/.test(time)) return false;
  head.columns.time.unit ??= time === '' || time === '-' ? null : time;
  for (const column of head.columns.sensors) {
    const unit = told[column.at] ?? '';
    if (unit === '' || unit === '-') continue;
    checkUnit(column.sensor, unit, placeOf(file, line));
    column.unit ??= unit;
  }
  return true;
}

/** Headers are UTF-8; old loggers write Latin-1, in which no µ or ° is valid UTF-8. */
function decodeHeader(bytes: Uint8Array): string {
  try {
    return new TextDecoder('utf-8', { fatal: true }).decode(bytes);
  } catch {
    return new TextDecoder('latin1').decode(bytes);
  }
}

/** Fields of a header, with quotes (RFC 4180): a separator within them is none, two of them are one. */
function split(text: string, separator: string): string[] {
  const fields: string[] = [];
  let field = '';
  let quoted = false;
  for (let at = 0; at < text.length; at++) {
    const character = text[at]!;
    if (character === '"') {
      if (quoted && text[at + 1] === '"') field += text[++at]!;
      else quoted = !quoted;
    } else if (character === separator && !quoted) {
      fields.push(field);
      field = '';
    } else field += character;
  }
  return [...fields, field];
}

function tooMany(head: Head, found: number): string {
  const hint = head.decimalComma ? '' : '; with a decimal comma, separate fields by semicolon or tab';
  return `found ${found} fields, expected ${head.roles.length}${hint}`;
}

const placeOf = (file: string, line: Line): string => `${file}:${line.number}`;

const textOf = (bytes: Uint8Array, from: number, to: number): string =>
  decodeHeader(bytes.subarray(from, Math.min(to, from + 60)));

async function nextLine(lines: LineSource): Promise<Line | null> {
  return lines.take() ?? ((await lines.refill()) ? lines.take() : null);
}

function fail(code: ErrorCode, where: string, detail: string): never {
  throw new SpanbeatError({ code, where, detail });
}
