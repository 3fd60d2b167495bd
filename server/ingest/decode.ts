import { BLOCK_LIMITS, type ChannelSamples, type SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition, Logger, Sensor } from '#core/contract/bridge.ts';
import { counted } from '#core/contract/counted.ts';
import { accept, refuse, type Complaint, type ErrorCode, type Result } from '#core/contract/errors.ts';
import { EARLIEST_MICROS, LATEST_MICROS, MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';
import { decodeSamples } from './samples-payload.ts';
import { decodeSenml } from './senml-payload.ts';
import { recordsToRuns } from './senml-runs.ts';
import { sensorNamed } from './sensor-names.ts';
import { addressOf, type Directory } from './topics.ts';

export interface Decoded {
  /** What can be used. Its samples own their memory and may be handed to another thread. */
  blocks: SampleBlock[];
  /** What cannot, one complaint a cause; at most LIMIT_COMPLAINTS and one more that counts the rest. */
  complaints: Complaint[];
}

export interface DecodeContext {
  /**
   * When the message arrived. Samples far ahead of it are refused, and times that SenML gives relative to now are
   * relative to it. A replayed journal gives the time it kept, so that it decides as the live server did. Null where
   * the arrival is not known, as for a recording: then nothing counts as ahead, and relative times are refused.
   */
  nowMicros: Micros | null;
}

/** How far a logger's clock may run ahead. */
const AHEAD_MICROS = 60 * MICROS_PER_SECOND;
/** How far a rate may be off before its samples would be put at wrong times. */
const RATE_TOLERANCE = 0.005;
const LIMIT_COMPLAINTS = 64;

/**
 * Turns one message into blocks of the bridge's sensors. Nothing valid is lost because something beside it is bad:
 * each channel, and each SenML record, is judged for itself.
 *
 * Values are in the sensor's unit, before its scale and offset. Values that are not finite become NaN, which the
 * pipeline treats as a gap. Channels of one message with different lengths come as blocks of their own.
 */
export function decodeMessage(
  directory: Directory,
  topic: string,
  payload: Uint8Array,
  { nowMicros }: DecodeContext,
): Decoded {
  const complaints = new ComplaintList(topic.slice(0, 200));
  const source = sourceOf(directory, topic, payload);
  if (!source.ok) {
    complaints.add(source.complaint);
    return { blocks: [], complaints: complaints.all() };
  }
  const channels =
    source.value.kind === 'samples'
      ? fromSamples(source.value, payload, complaints)
      : fromSenml(source.value, payload, nowMicros, complaints);
  const timely = channels.filter((channel) => {
    const wrong = timeComplaint(channel, nowMicros);
    if (wrong !== null) complaints.add(wrong);
    return wrong === null;
  });
  countGaps(timely, complaints);
  return { blocks: toBlocks(source.value, timely), complaints: complaints.all() };
}

interface Source {
  definition: BridgeDefinition;
  logger: Logger;
  kind: 'samples' | 'senml';
}

/** A channel with its own time, before channels that share it are put together. */
interface TimedChannel extends ChannelSamples {
  startMicros: Micros;
  rateHz: number;
  sequence: number | null;
}

function sourceOf(directory: Directory, topic: string, payload: Uint8Array): Result<Source> {
  if (payload.length > BLOCK_LIMITS.bytes) {
    return refuse('MESSAGE_TOO_LARGE', `${payload.length} bytes, at most ${BLOCK_LIMITS.bytes}`);
  }
  const address = addressOf(directory, topic);
  if (!address.ok) return address;
  const { bridge, logger: id, kind } = address.value;
  const definition = directory.bridge(bridge);
  if (definition === undefined) return refuse('BRIDGE_UNKNOWN', `no bridge ${bridge.slice(0, 64)}`);
  const logger = definition.loggers.find((one) => one.id === id);
  if (logger === undefined) return refuse('LOGGER_UNKNOWN', `${bridge} has no logger ${id.slice(0, 64)}`);
  if (kind === 'status') return refuse('MESSAGE_TOPIC', 'a status carries no samples');
  return accept({ definition, logger, kind });
}

function fromSamples({ definition, logger }: Source, payload: Uint8Array, complaints: ComplaintList): TimedChannel[] {
  const decoded = decodeSamples(payload);
  if (!decoded.ok) {
    complaints.add(decoded.complaint);
    return [];
  }
  const { startMicros, rateHz, sequence } = decoded.value;
  for (const complaint of decoded.value.complaints) complaints.add(complaint);
  const channels = new Map<string, TimedChannel>();
  for (const { name, samples } of decoded.value.channels) {
    const where = `channels.${name.slice(0, 64)}`;
    const sensor = sensorNamed(definition, logger, name);
    if (!sensor.ok) complaints.add({ ...sensor.complaint, where });
    else if (channels.has(sensor.value.id)) {
      complaints.add({ code: 'MESSAGE_SHAPE', where, detail: `sensor ${sensor.value.id} comes under two names` });
    } else if (Math.abs(rateHz / sensor.value.rateHz - 1) > RATE_TOLERANCE) {
      complaints.add({ code: 'RATE_WRONG', where, detail: rateDetail(rateHz, sensor.value) });
    } else if (samples.length > 0) {
      channels.set(sensor.value.id, { sensor: sensor.value.id, samples, startMicros, rateHz, sequence });
    }
  }
  return [...channels.values()];
}

function fromSenml(
  { definition, logger }: Source,
  payload: Uint8Array,
  nowMicros: Micros | null,
  complaints: ComplaintList,
): TimedChannel[] {
  const decoded = decodeSenml(payload, nowMicros);
  if (!decoded.ok) {
    complaints.add(decoded.complaint);
    return [];
  }
  for (const { detail, count, first } of decoded.value.leftOut) {
    complaints.add({ code: 'MESSAGE_SHAPE', where: `record ${first}`, detail: `${detail} (${count} of them)` });
  }
  const { runs, complaints: others } = recordsToRuns(definition, logger, decoded.value.records);
  for (const complaint of others) complaints.add(complaint);
  return runs.map((run) => ({ ...run, sequence: null }));
}

function rateDetail(rateHz: number, sensor: Sensor): string {
  return `${sensor.id} comes at ${rateHz} Hz, defined are ${sensor.rateHz} Hz`;
}

function timeComplaint(channel: TimedChannel, nowMicros: Micros | null): Complaint | null {
  const { startMicros, samples, rateHz, sensor } = channel;
  const endMicros = sampleMicros(startMicros, samples.length - 1, rateHz);
  const refused = (code: ErrorCode, detail: string): Complaint => ({ code, where: sensor, detail });
  if (startMicros < EARLIEST_MICROS) return refused('TIME_OUT_OF_RANGE', `starts at ${startMicros} µs since 1970`);
  if (endMicros > LATEST_MICROS) return refused('TIME_OUT_OF_RANGE', `ends at ${endMicros} µs since 1970`);
  if (nowMicros !== null && endMicros > nowMicros + AHEAD_MICROS) {
    const aheadS = Math.round((endMicros - nowMicros) / MICROS_PER_SECOND);
    return refused('TIME_IN_FUTURE', `ends ${aheadS} s ahead of this machine's clock`);
  }
  return null;
}

/** Infinite values become NaN, and all that are not finite are counted. */
function countGaps(channels: readonly TimedChannel[], complaints: ComplaintList): void {
  for (const { sensor, samples } of channels) {
    let gaps = 0;
    for (let i = 0; i < samples.length; i += 1) {
      if (Number.isFinite(samples[i])) continue;
      samples[i] = NaN;
      gaps += 1;
    }
    if (gaps > 0) {
      const detail = `${gaps} of ${counted(samples.length, 'value')} not finite`;
      complaints.add({ code: 'VALUE_NOT_FINITE', where: sensor, detail });
    }
  }
}

/** Channels that share start, rate and length share a block; blocks keep the order of their first channel. */
function toBlocks({ definition, logger }: Source, channels: readonly TimedChannel[]): SampleBlock[] {
  const blocks = new Map<string, SampleBlock & { channels: ChannelSamples[] }>();
  for (const { startMicros, rateHz, sequence, sensor, samples } of channels) {
    const key = `${startMicros} ${rateHz} ${samples.length}`;
    let block = blocks.get(key);
    // SenML may name one sensor twice at one time: the second goes its own way, for the pipeline to count.
    if (block?.channels.some((channel) => channel.sensor === sensor)) block = undefined;
    if (block === undefined) {
      block = { bridge: definition.id, logger: logger.id, sequence, startMicros, rateHz, channels: [] };
      blocks.set(blocks.has(key) ? `${key} ${blocks.size}` : key, block);
    }
    block.channels.push({ sensor, samples });
  }
  return [...blocks.values()];
}

/** Complaints about one message: each names the topic, and a hostile message cannot make many of them. */
class ComplaintList {
  readonly #topic: string;
  readonly #kept: Complaint[] = [];
  #more = 0;
  #moreCode: ErrorCode = 'MESSAGE_SHAPE';

  constructor(topic: string) {
    this.#topic = topic;
  }

  add({ code, where, detail }: Complaint): void {
    if (this.#kept.length >= LIMIT_COMPLAINTS) {
      this.#more += 1;
      this.#moreCode = code;
      return;
    }
    const within = where === undefined || where === this.#topic ? '' : ` ${where}`;
    this.#kept.push({ code, where: `${this.#topic}${within}`, detail });
  }

  all(): Complaint[] {
    if (this.#more === 0) return this.#kept;
    return [...this.#kept, { code: this.#moreCode, where: this.#topic, detail: `and ${this.#more} more complaints` }];
  }
}
