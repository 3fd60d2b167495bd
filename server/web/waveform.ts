import { encodeFrame, type FrameChannel } from '#core/contract/frame.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { civilTime, MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';
import type { StoredWaveform } from './backend.ts';

/** A passage's wave form as one binary frame; a sensor with gaps has one channel entry a run. */
export function waveformFrame({ passage, channels }: StoredWaveform): Uint8Array {
  const runs = channels.flatMap(({ sensor, rateHz, runs }) => runs.map((run) => ({ sensor, rateHz, ...run })));
  const data = new Float32Array(runs.reduce((sum, { samples }) => sum + samples.length, 0));
  const entries: FrameChannel[] = [];
  let at = 0;
  for (const { sensor, rateHz, startMicros, samples } of runs) {
    data.set(samples, at);
    entries.push({ sensor, startMicros, stepMicros: MICROS_PER_SECOND / rateHz, count: samples.length, at });
    at += samples.length;
  }
  return encodeFrame({ bridge: passage.bridge, kind: 'record', layout: 'samples', channels: entries }, data);
}

/** Rows a chunk: some hundred kilobytes. */
const ROWS_AT_ONCE = 4096;

/**
 * CSV (RFC 4180): a column `time` (ISO 8601, UTC, microseconds) and one a sensor, calibrated, in SI. Rows are the sample
 * times of all channels in order; a channel without a sample at that time leaves its field empty.
 */
export function* waveformCsv(channels: readonly WindowChannel[]): Generator<string> {
  yield `time,${channels.map(({ sensor }) => sensor).join(',')}\r\n`;
  const cursors = channels.map((channel) => ({ channel, run: 0, index: 0 }));
  let rows: string[] = [];
  for (;;) {
    const times = cursors.map(timeAt);
    const micros = Math.min(...times);
    if (micros === Infinity) break;
    const values = cursors.map((cursor, c) => (times[c] === micros ? shortest(take(cursor)) : ''));
    rows.push(`${isoMicros(micros)},${values.join(',')}\r\n`);
    if (rows.length >= ROWS_AT_ONCE) {
      yield rows.join('');
      rows = [];
    }
  }
  yield rows.join('');
}

interface Cursor {
  channel: WindowChannel;
  run: number;
  index: number;
}

function timeAt({ channel, run, index }: Cursor): Micros {
  const at = channel.runs[run];
  return at === undefined ? Infinity : sampleMicros(at.startMicros, index, channel.rateHz);
}

function take(cursor: Cursor): number {
  const { samples } = cursor.channel.runs[cursor.run]!;
  const value = samples[cursor.index]!;
  cursor.index += 1;
  while (cursor.run < cursor.channel.runs.length && cursor.index >= cursor.channel.runs[cursor.run]!.samples.length) {
    cursor.run += 1;
    cursor.index = 0;
  }
  return value;
}

/** The shortest decimal that reads back as the same float32. */
export function shortest(value: number): string {
  if (!Number.isFinite(value)) return '';
  for (let digits = 6; digits < 9; digits++) {
    const rounded = Number(value.toPrecision(digits));
    if (Math.fround(rounded) === value) return String(rounded);
  }
  return String(Number(value.toPrecision(9)));
}

/** @example isoMicros(1_764_565_953_250_001) // '2025-12-01T05:12:33.250001Z' */
export function isoMicros(micros: Micros): string {
  const { year, month, day, hour, minute, second } = civilTime(Math.floor(micros / MICROS_PER_SECOND));
  const two = (n: number): string => String(n).padStart(2, '0');
  const fraction = String(micros % MICROS_PER_SECOND).padStart(6, '0');
  return `${year}-${two(month)}-${two(day)}T${two(hour)}:${two(minute)}:${two(second)}.${fraction}Z`;
}
