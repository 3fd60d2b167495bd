import { encodeFrame, type FrameChannel } from '#core/contract/frame.ts';
import { COLUMN_MICROS } from '#core/contract/live.ts';
import type { LiveSamples } from '#core/contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import {
  appendColumn,
  columnStep,
  createGathering,
  createRing,
  gather,
  mergeColumns,
  type Gathering,
  type Ring,
} from './columns.ts';

/** How long the finest columns are held: longer than any flush, and than any block that loggers are asked to send. */
const FINE_SECONDS = 4;
/** How much of the past a viewer may ask for. */
const PAST_SECONDS = 60;
/** Columns of one frame of the past; the width is doubled until they fit, which makes some 200 kB. */
const LIMIT_COLUMNS = 24_000;
/** Bytes that the past of all channels may take; with many channels it is kept in wider columns. */
const PAST_BYTES = 64 * 1024 * 1024;

/** The live envelopes of one bridge. Each sample is looked at once; all widths are merged from the finest columns. */
export interface Envelopes {
  bridge: string;
  pastMicros: number;
  channels: Map<string, EnvelopeChannel>;
}

interface EnvelopeChannel {
  sensor: string;
  rateHz: number;
  gathering: Gathering;
  fine: Ring;
  past: Ring;
  /** The wider column that finished fine ones are gathered into for the past. */
  wide: Gathering;
}

/** How far a group of viewers has been served: by sensor, the time at which its next column begins. */
export type Served = Map<string, Micros>;

/**
 * The width in which the past is held where so many channels share the memory for it.
 *
 * @example pastColumnMicros(48) // 5_000
 */
export function pastColumnMicros(channels: number): number {
  const fits = (step: number): boolean => ((channels * PAST_SECONDS * MICROS_PER_SECOND) / step) * 8 <= PAST_BYTES;
  let step: number = COLUMN_MICROS[0];
  while (!fits(step)) step *= 2;
  return step;
}

export function createEnvelopes(bridge: string, pastMicros: number): Envelopes {
  return { bridge, pastMicros, channels: new Map() };
}

/** Takes the live samples of one channel; they are not kept. */
export function addSamples(envelopes: Envelopes, { sensor, startMicros, rateHz, samples }: LiveSamples): void {
  let channel = envelopes.channels.get(sensor);
  if (channel?.rateHz !== rateHz || wentBack(channel, startMicros)) {
    channel = createChannel(sensor, rateHz, envelopes.pastMicros);
    envelopes.channels.set(sensor, channel);
  }
  const { fine, past, wide, gathering } = channel;
  const factor = past.stepMicros / fine.stepMicros;
  gather(gathering, fine.stepMicros, startMicros, rateHz, samples, (number, min, max) => {
    appendColumn(fine, number, min, max);
    if (factor === 1) {
      appendColumn(past, number, min, max);
      return;
    }
    const wider = Math.floor(number / factor);
    if (wider !== wide.number) {
      if (wide.number >= 0) appendColumn(past, wide.number, wide.min, wide.max);
      wide.number = wider;
      wide.min = min;
      wide.max = max;
    } else {
      wide.min = Math.min(wide.min, min);
      wide.max = Math.max(wide.max, max);
    }
  });
}

/** The logger's clock went back: what is held is of a time that comes again. */
function wentBack({ fine }: EnvelopeChannel, startMicros: Micros): boolean {
  return fine.end > fine.start && fine.end * fine.stepMicros - startMicros > MICROS_PER_SECOND;
}

function createChannel(sensor: string, rateHz: number, pastMicros: number): EnvelopeChannel {
  const fine = createRing(columnStep(COLUMN_MICROS[0], rateHz), FINE_SECONDS);
  const past = createRing(columnStep(pastMicros, rateHz), PAST_SECONDS);
  return { sensor, rateHz, gathering: createGathering(), fine, past, wide: createGathering() };
}

/** A group of viewers that is served from now on. */
export function beginServing(envelopes: Envelopes, columnMicros: number, sensors: readonly string[] | null): Served {
  return new Map(chosen(envelopes, sensors).map((channel) => [channel.sensor, finishedMicros(channel, columnMicros)]));
}

/**
 * The columns that were finished since the group was last served, as a frame's bytes; null where there are none. Where the
 * next column is held no longer, the oldest that is held comes next.
 *
 * @param served changed
 */
export function nextFrame(
  envelopes: Envelopes,
  columnMicros: number,
  sensors: readonly string[] | null,
  served: Served,
): Uint8Array | null {
  const spans = chosen(envelopes, sensors).flatMap((channel) => {
    const endMicros = finishedMicros(channel, columnMicros);
    const span = fineSpan(channel, columnMicros, served.get(channel.sensor) ?? 0, endMicros);
    served.set(channel.sensor, endMicros);
    return span;
  });
  return encodeSpans(envelopes.bridge, spans);
}

/**
 * The past up to where a group has been served, in the width asked for or the next wider one that is held and fits; what
 * is too new for whole wider columns follows in the width asked for, as a second entry of the sensor.
 *
 * @param sinceMicros how far back from each channel's newest column, µs
 * @param coarser power of two by which the columns are at least wider than asked for
 */
export function pastFrame(
  envelopes: Envelopes,
  columnMicros: number,
  sensors: readonly string[] | null,
  served: Served,
  sinceMicros: number,
  coarser = 1,
): Uint8Array | null {
  const channels = chosen(envelopes, sensors);
  const most = LIMIT_COLUMNS / Math.max(1, channels.length);
  let asked = columnMicros * coarser;
  while (sinceMicros / asked > most) asked *= 2;
  const spans = channels.flatMap((channel) => {
    const endMicros = served.get(channel.sensor);
    if (endMicros === undefined) return [];
    const { past, rateHz } = channel;
    const stepMicros = Math.max(past.stepMicros, columnStep(asked, rateHz));
    const oldest = Math.ceil((past.start * past.stepMicros) / stepMicros);
    const from = Math.max(Math.ceil((endMicros - sinceMicros) / stepMicros), oldest);
    const to = Math.floor(Math.min(endMicros, past.end * past.stepMicros) / stepMicros);
    const wide = from < to ? [{ sensor: channel.sensor, ring: past, stepMicros, from, to }] : [];
    const restMicros = from < to ? to * stepMicros : endMicros - sinceMicros;
    return [...wide, ...fineSpan(channel, columnMicros, restMicros, endMicros)];
  });
  return encodeSpans(envelopes.bridge, spans);
}

/** End of the newest whole column of the width asked for. */
function finishedMicros({ fine, rateHz }: EnvelopeChannel, columnMicros: number): Micros {
  const stepMicros = columnStep(columnMicros, rateHz);
  return Math.floor((fine.end * fine.stepMicros) / stepMicros) * stepMicros;
}

function fineSpan(
  { sensor, rateHz, fine }: EnvelopeChannel,
  columnMicros: number,
  fromMicros: Micros,
  endMicros: Micros,
): Span[] {
  const stepMicros = columnStep(columnMicros, rateHz);
  const oldest = Math.floor((fine.start * fine.stepMicros) / stepMicros);
  const from = Math.max(Math.ceil(fromMicros / stepMicros), oldest);
  const to = Math.floor(endMicros / stepMicros);
  return from < to ? [{ sensor, ring: fine, stepMicros, from, to }] : [];
}

/** Columns of one channel that go into a frame. */
interface Span {
  sensor: string;
  ring: Ring;
  stepMicros: number;
  from: number;
  to: number;
}

function encodeSpans(bridge: string, spans: readonly Span[]): Uint8Array | null {
  if (spans.length === 0) return null;
  const data = new Float32Array(spans.reduce((sum, { from, to }) => sum + 2 * (to - from), 0));
  const channels: FrameChannel[] = [];
  let at = 0;
  for (const { sensor, ring, stepMicros, from, to } of spans) {
    mergeColumns(ring, stepMicros, from, to, data, at);
    channels.push({ sensor, startMicros: from * stepMicros, stepMicros, count: to - from, at });
    at += 2 * (to - from);
  }
  return encodeFrame({ bridge, kind: 'live', layout: 'envelope', channels }, data);
}

function chosen(envelopes: Envelopes, sensors: readonly string[] | null): EnvelopeChannel[] {
  if (sensors === null) return [...envelopes.channels.values()];
  return sensors.flatMap((sensor) => envelopes.channels.get(sensor) ?? []);
}
