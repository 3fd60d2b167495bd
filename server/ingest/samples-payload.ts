import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { counted } from '#core/contract/counted.ts';
import { accept, refuse, type Complaint, type Result } from '#core/contract/errors.ts';
import type { Micros } from '#core/contract/time.ts';
import { decodeCbor, isTypedNumbers, type Cbor, type CborMap } from './cbor.ts';
import { countOf, toDoubles } from './typed-numbers.ts';

/**
 * The `samples` payload, a CBOR map with text keys:
 *
 *   start     time of the first sample, µs since the Unix epoch; a whole number
 *   rate      samples per second and channel
 *   channels  map: name of the sensor → typed array (RFC 8746) or plain array of numbers, in the sensor's unit
 *   seq       optional: the logger's own count of its messages, a whole number from 0
 *   scale     optional: factor on every number, or a map: name → factor, before the definition's scale and offset
 *
 * Typed arrays may be float 16/32/64 or signed or unsigned 8/16/32-bit integers, in both byte orders. The whole may be
 * tagged 55799. Other keys are passed over, so that a logger may say more than is asked.
 */
export interface SamplesMessage {
  startMicros: Micros;
  rateHz: number;
  sequence: number | null;
  channels: NamedSamples[];
  /** Channels left out, each with its reason. */
  complaints: Complaint[];
}

export interface NamedSamples {
  name: string;
  samples: Float64Array;
}

/** Major types of CBOR (RFC 8949, 3.1) that can hold a map; others are no CBOR of a logger at all, text mostly. */
const CONTAINERS: ReadonlySet<number> = new Set([4, 5, 6]);
/** `{` and `[`. */
const JSON_BEGINS: ReadonlySet<number> = new Set([0x7b, 0x5b]);

/**
 * Reads a `samples` payload. A channel that cannot be read is left out with a complaint; the others are kept. A field
 * that concerns all of them refuses the message.
 */
export function decodeSamples(payload: Uint8Array): Result<SamplesMessage> {
  const first = payload[0];
  if (first !== undefined && !CONTAINERS.has(first >> 5)) {
    const hint = JSON_BEGINS.has(first) ? '; JSON belongs on the topic that ends in senml' : '';
    return refuse('MESSAGE_ENCODING', `does not begin as a CBOR map${hint}`);
  }
  const decoded = decodeCbor(payload);
  if (!decoded.ok) return decoded;
  const message = decoded.value;
  if (!(message instanceof Map)) return refuse('MESSAGE_SHAPE', `expected a map, found ${describe(message)}`);

  const start = message.get('start');
  if (typeof start === 'bigint') return refuse('TIME_OUT_OF_RANGE', `expected µs since 1970, found ${start}`, 'start');
  if (!isWhole(start)) return refuse('MESSAGE_SHAPE', `expected whole microseconds, found ${describe(start)}`, 'start');
  const rate = message.get('rate');
  if (typeof rate !== 'number' || !(rate > 0 && rate < Infinity)) {
    return refuse('MESSAGE_SHAPE', `expected samples per second, found ${describe(rate)}`, 'rate');
  }
  const sequence = message.get('seq') ?? null;
  if (sequence !== null && !(isWhole(sequence) && sequence >= 0)) {
    return refuse('MESSAGE_SHAPE', `expected a whole number from 0, found ${describe(sequence)}`, 'seq');
  }
  const channels = message.get('channels');
  if (!(channels instanceof Map)) {
    return refuse('MESSAGE_SHAPE', `expected a map of sensors, found ${describe(channels)}`, 'channels');
  }
  if (channels.size > BLOCK_LIMITS.channels) {
    return refuse('SENSOR_TOO_MANY', `${channels.size} channels, at most ${BLOCK_LIMITS.channels}`, 'channels');
  }
  const scale = message.get('scale');
  if (scale !== undefined && scale !== null && !isFactor(scale) && !(scale instanceof Map)) {
    return refuse('MESSAGE_SHAPE', `expected a finite number or a map, found ${describe(scale)}`, 'scale');
  }
  return accept({ startMicros: start, rateHz: rate, sequence, ...readChannels(channels, scale) });
}

function readChannels(channels: CborMap, scale: Cbor): Pick<SamplesMessage, 'channels' | 'complaints'> {
  const kept: NamedSamples[] = [];
  const complaints: Complaint[] = [];
  for (const [name, numbers] of channels) {
    const factor = scale instanceof Map ? (scale.get(name) ?? 1) : (scale ?? 1);
    const read = isFactor(factor)
      ? readNumbers(numbers, factor)
      : refuse<Float64Array>('MESSAGE_SHAPE', `expected a finite scale, found ${describe(factor)}`);
    if (read.ok) kept.push({ name: String(name), samples: read.value });
    else complaints.push({ ...read.complaint, where: `channels.${String(name).slice(0, 64)}` });
  }
  return { channels: kept, complaints };
}

function readNumbers(numbers: Cbor, factor: number): Result<Float64Array> {
  if (numbers instanceof Float64Array) {
    if (numbers.length > BLOCK_LIMITS.samplesPerChannel) return tooLong(numbers.length);
    return accept(factor === 1 ? numbers : numbers.map((value) => value * factor));
  }
  if (Array.isArray(numbers) && numbers.length === 0) return accept(new Float64Array(0));
  if (!isTypedNumbers(numbers)) {
    return refuse('MESSAGE_SHAPE', `expected a typed array or an array of numbers, found ${describe(numbers)}`);
  }
  const count = countOf(numbers);
  if (count === null) {
    return refuse(
      'MESSAGE_SHAPE',
      `${counted(numbers.bytes.length, 'byte')} under tag ${numbers.tag}: no typed array taken here`,
    );
  }
  return count > BLOCK_LIMITS.samplesPerChannel ? tooLong(count) : accept(toDoubles(numbers, factor));
}

function tooLong(count: number): Result<Float64Array> {
  return refuse('MESSAGE_TOO_LARGE', `${count} samples, at most ${BLOCK_LIMITS.samplesPerChannel} a channel`);
}

const isWhole = (value: Cbor): value is number => typeof value === 'number' && Number.isSafeInteger(value);
const isFactor = (value: Cbor): value is number => typeof value === 'number' && Number.isFinite(value);

/** What was found, for a person, never longer than a line. */
export function describe(value: Cbor): string {
  if (value === undefined) return 'nothing';
  if (value === null || typeof value === 'number' || typeof value === 'boolean') return String(value);
  if (typeof value === 'bigint') return String(value).slice(0, 40);
  if (typeof value === 'string') return `the text ${JSON.stringify(value.slice(0, 40))}`;
  if (value instanceof Map) return `a map of ${value.size} keys`;
  if (value instanceof Uint8Array) return counted(value.length, 'byte');
  return isTypedNumbers(value) ? 'a typed array' : `an array of ${counted(value.length, 'item')}`;
}
