import type { BridgeDefinition } from './bridge.ts';
import type { WindowChannel } from './pipeline.ts';
import { civilTime, MICROS_PER_SECOND, sampleMicros, type Micros } from './time.ts';
import { SI_UNIT } from './units.ts';

/** Rows put together before they are handed on. */
const ROWS_PER_CHUNK = 2000;

/** Samples of one sensor, in order of time. */
export interface CsvTrack {
  sensor: string;
  rateHz: number;
  runs: readonly { startMicros: Micros; samples: Float32Array | Float64Array }[];
}

/**
 * A passage's wave form as CSV (RFC 4180 but for line ends): `time` in ISO 8601 UTC with microseconds, one column a sensor
 * with its unit, one row each moment at which any of them has a sample. A sensor of a lower rate, or in a gap, leaves its
 * field empty. Read again by this program, each sample comes back to the same float32; the units in the header say that
 * no scale of the definition holds for them any more.
 *
 * @param definition the bridge, for the units
 * @param channels calibrated samples in SI
 * @yields text, some thousand rows at a time
 */
export function* csvOfWindow(
  definition: Pick<BridgeDefinition, 'sensors'>,
  channels: readonly WindowChannel[],
): Generator<string> {
  const unitOf = new Map(definition.sensors.map(({ id, quantity }) => [id, SI_UNIT[quantity]]));
  yield csvHeader(channels.map(({ sensor }) => `${sensor} [${unitOf.get(sensor) ?? '-'}]`));
  yield* csvRows(channels);
}

export const csvHeader = (columns: readonly string[]): string => `time,${columns.join(',')}\n`;

/**
 * Rows under such a header, one column a track.
 *
 * @yields text, some thousand rows at a time
 */
export function* csvRows(tracks: readonly CsvTrack[]): Generator<string> {
  const cursors = tracks.map(createCursor);
  let rows: string[] = [];
  for (;;) {
    const micros = Math.min(...cursors.map((cursor) => cursor.micros));
    if (micros === Infinity) break;
    let row = isoMicros(micros);
    for (const cursor of cursors) row += cursor.micros === micros ? `,${cursor.next()}` : ',';
    rows.push(row);
    if (rows.length === ROWS_PER_CHUNK) {
      yield `${rows.join('\n')}\n`;
      rows = [];
    }
  }
  if (rows.length > 0) yield `${rows.join('\n')}\n`;
}

interface Cursor {
  /** Time of the sample that `next` will give; infinite at the end. */
  micros: Micros;
  next(): string;
}

function createCursor({ runs, rateHz }: CsvTrack): Cursor {
  let run = 0;
  let index = 0;
  const cursor: Cursor = {
    micros: Infinity,
    next() {
      const value = runs[run]!.samples[index]!;
      index++;
      settle();
      return Math.fround(value) === value ? float32Text(value) : Number.isNaN(value) ? 'NaN' : String(value);
    },
  };
  const settle = (): void => {
    while (run < runs.length && index >= runs[run]!.samples.length) {
      run++;
      index = 0;
    }
    const here = runs[run];
    cursor.micros = here === undefined ? Infinity : sampleMicros(here.startMicros, index, rateHz);
  };
  settle();
  return cursor;
}

/**
 * The shortest decimal that reads back to the same float32. Nine digits always suffice (IEEE 754-2008, 5.12.2).
 *
 * @example float32Text(Math.fround(0.1)) // '0.1'
 */
export function float32Text(value: number): string {
  if (Object.is(value, -0)) return '-0';
  for (let digits = 6; digits < 9; digits++) {
    const short = Number(value.toPrecision(digits));
    if (Math.fround(short) === value) return String(short);
  }
  return String(Number(value.toPrecision(9)));
}

/** @example isoMicros(1_796_101_953_200_000) // '2026-12-01T05:12:33.200000Z' */
export function isoMicros(micros: Micros): string {
  const seconds = Math.floor(micros / MICROS_PER_SECOND);
  const { year, month, day, hour, minute, second } = civilTime(seconds);
  const two = (value: number): string => String(value).padStart(2, '0');
  const fraction = String(micros - seconds * MICROS_PER_SECOND).padStart(6, '0');
  return `${year}-${two(month)}-${two(day)}T${two(hour)}:${two(minute)}:${two(second)}.${fraction}Z`;
}
