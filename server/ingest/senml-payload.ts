import { accept, refuse, type Result } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { decodeCbor, type Cbor, type CborMap } from './cbor.ts';
import { describe } from './samples-payload.ts';

/** SenML (RFC 8428) packs, in JSON (section 5) or CBOR (section 6), with base fields and times resolved (section 4.6). */
export interface SenmlMessage {
  records: SenmlRecord[];
  /** Records left out, by reason: each reason once, with how many and the first of them. */
  leftOut: { detail: string; count: number; first: number }[];
}

export interface SenmlRecord {
  /** Base name and name. */
  name: string;
  /** The record's own name, without the base name. */
  ownName: string;
  micros: Micros;
  value: number;
  /** Null where neither the record nor a base unit names one. */
  unit: string | null;
}

/** A pack is for slow values and short runs; fast channels belong in `samples`. */
export const SENML_LIMITS = { bytes: 4 * 1024 * 1024, records: 100_000, depth: 4, nameLength: 256 } as const;

/** Section 4.5.3: lower times are relative to now. */
const RELATIVE_BELOW_S = 2 ** 28;
/** Section 4.4. */
const VERSION = 10;
/** Sections 6 and 12.2: the labels of CBOR. */
const CBOR_LABELS: ReadonlyMap<number, string> = new Map([
  [-1, 'bver'],
  [-2, 'bn'],
  [-3, 'bt'],
  [-4, 'bu'],
  [-5, 'bv'],
  [-6, 'bs'],
  [0, 'n'],
  [1, 'u'],
  [2, 'v'],
  [3, 'vs'],
  [4, 'vb'],
  [5, 's'],
  [6, 't'],
  [7, 'ut'],
  [8, 'vd'],
]);
/** Section 4.5.1. */
const NAME = /^[A-Za-z0-9][-:./_A-Za-z0-9]*$/;

/**
 * Reads a SenML pack. The form is told by the first byte: JSON begins with white space or a bracket, a CBOR array never.
 *
 * Only numbers are measurements here: records with a string, boolean or data value, and those with nothing but a sum,
 * are left out and counted. A label that must be understood (ending in `_`) or a newer version refuses the pack.
 *
 * @param nowMicros what relative times are relative to: when the message arrived. Null where that is not known; such
 *   records are then left out
 * @example decodeSenml(utf8('[{"n":"T1","u":"Cel","v":23.1,"t":1.8e9}]'), null) // T1, 23.1 Cel
 */
export function decodeSenml(payload: Uint8Array, nowMicros: Micros | null): Result<SenmlMessage> {
  if (payload.length > SENML_LIMITS.bytes) {
    return refuse('MESSAGE_TOO_LARGE', `${payload.length} bytes, at most ${SENML_LIMITS.bytes} in a SenML pack`);
  }
  const parsed = isJson(payload) ? parseJson(payload) : parseCbor(payload);
  if (!parsed.ok) return parsed;
  if (parsed.value.length > SENML_LIMITS.records) {
    return refuse('MESSAGE_TOO_LARGE', `${parsed.value.length} records, at most ${SENML_LIMITS.records}`);
  }
  return resolve(parsed.value, nowMicros);
}

type Fields = ReadonlyMap<string, unknown>;

interface Base {
  name: string;
  timeS: number;
  unit: string | null;
  value: number;
}

function resolve(pack: readonly Fields[], nowMicros: Micros | null): Result<SenmlMessage> {
  const base: Base = { name: '', timeS: 0, unit: null, value: 0 };
  const records: SenmlRecord[] = [];
  const leftOut = new Map<string, { detail: string; count: number; first: number }>();
  const leave = (detail: string, index: number): void => {
    const known = leftOut.get(detail);
    if (known === undefined) leftOut.set(detail, { detail, count: 1, first: index });
    else known.count += 1;
  };
  for (const [index, fields] of pack.entries()) {
    for (const label of fields.keys()) {
      if (label.endsWith('_')) {
        return refuse('MESSAGE_SHAPE', `label ${label.slice(0, 40)} must be understood and is not`, `record ${index}`);
      }
    }
    const wrong = takeBase(base, fields);
    if (wrong !== null) return refuse('MESSAGE_SHAPE', wrong, `record ${index}`);
    const record = readRecord(base, fields, nowMicros);
    if (typeof record === 'string') leave(record, index);
    else if (record !== null) {
      records.push(record);
      if (fields.has('s')) leave('a sum beside the value is passed over', index);
    }
  }
  return accept({ records, leftOut: [...leftOut.values()] });
}

/** Base fields hold from the record they stand in. Returns what is wrong with them, or null. */
function takeBase(base: Base, fields: Fields): string | null {
  const version = fields.get('bver');
  if (version !== undefined && !(Number.isInteger(version) && Number(version) <= VERSION)) {
    return `expected SenML version ${VERSION} or lower, found ${told(version)}`;
  }
  const name = fields.get('bn') ?? base.name;
  if (typeof name !== 'string' || name.length > SENML_LIMITS.nameLength)
    return `bn: expected a name, found ${told(name)}`;
  const unit = fields.get('bu') ?? base.unit;
  if (unit !== null && typeof unit !== 'string') return `bu: expected a unit, found ${told(unit)}`;
  const timeS = fields.get('bt') ?? base.timeS;
  if (!isFinite(timeS)) return `bt: expected seconds, found ${told(timeS)}`;
  const value = fields.get('bv') ?? base.value;
  if (!isFinite(value)) return `bv: expected a number, found ${told(value)}`;
  base.name = name;
  base.unit = unit;
  base.timeS = timeS;
  base.value = value;
  return null;
}

/** The resolved record; why it is left out; or null where it only carries base fields. */
function readRecord(base: Base, fields: Fields, nowMicros: Micros | null): SenmlRecord | string | null {
  const own = fields.get('n') ?? '';
  const value = fields.get('v');
  if (value === undefined) {
    if (fields.has('vs')) return 'a text value is no measurement';
    if (fields.has('vb')) return 'a boolean value is no measurement';
    if (fields.has('vd')) return 'a data value is no measurement';
    if (fields.has('s')) return 'a sum without a value is passed over';
    if (!fields.has('bv') || !fields.has('n')) return fields.has('n') ? 'a record without a value' : null;
  }
  if (value !== undefined && typeof value !== 'number') return 'a value that is no number';
  if (typeof own !== 'string') return 'a name that is no text';
  const name = base.name + own;
  if (name.length > SENML_LIMITS.nameLength || !NAME.test(name)) return 'a name that is empty or has other characters';
  const unit = fields.get('u') ?? base.unit;
  if (unit !== null && typeof unit !== 'string') return 'a unit that is no text';
  const timeS = fields.get('t') ?? 0;
  if (!isFinite(timeS)) return 'a time that is no number of seconds';
  const micros = toMicros(base.timeS, timeS, nowMicros);
  if (micros === null) return 'a time relative to an arrival that is not known';
  return { name, ownName: own, micros, value: base.value + (value ?? 0), unit };
}

/** Base and own time are brought to µs apart: their sum in seconds would round to 0.24 µs. */
function toMicros(baseS: number, ownS: number, nowMicros: Micros | null): Micros | null {
  const micros = Math.round(baseS * MICROS_PER_SECOND) + Math.round(ownS * MICROS_PER_SECOND);
  if (baseS + ownS >= RELATIVE_BELOW_S) return micros;
  return nowMicros === null ? null : nowMicros + micros;
}

/** Major types of CBOR (RFC 8949, 3.1) with which a pack of SenML may begin. */
const ARRAY_OR_TAG: ReadonlySet<number> = new Set([4, 6]);

function isJson(payload: Uint8Array): boolean {
  // Space, tab, line feed, carriage return, [ or {: as CBOR, none of these begins an array of maps.
  return payload.length > 0 && [0x20, 0x09, 0x0a, 0x0d, 0x5b, 0x7b].includes(payload[0]!);
}

const utf8 = new TextDecoder('utf-8', { fatal: true });

function parseJson(payload: Uint8Array): Result<Fields[]> {
  const depth = jsonDepth(payload);
  if (depth > SENML_LIMITS.depth) return refuse('MESSAGE_DEPTH', `nested deeper than ${SENML_LIMITS.depth} levels`);
  let parsed: unknown;
  try {
    parsed = JSON.parse(utf8.decode(payload));
  } catch (error) {
    if (!(error instanceof SyntaxError || error instanceof TypeError)) throw error;
    return /end of JSON|Unterminated/.test(error.message)
      ? refuse('MESSAGE_TRUNCATED', 'the JSON text ends too early')
      : refuse('MESSAGE_ENCODING', error instanceof TypeError ? 'not valid UTF-8' : 'not valid JSON');
  }
  if (!Array.isArray(parsed)) return refuse('MESSAGE_SHAPE', 'expected an array of SenML records');
  const records: Fields[] = [];
  for (const [index, record] of parsed.entries()) {
    if (typeof record !== 'object' || record === null || Array.isArray(record)) {
      return refuse('MESSAGE_SHAPE', 'expected a SenML record', `record ${index}`);
    }
    records.push(new Map<string, unknown>(Object.entries(record as Record<string, unknown>)));
  }
  return accept(records);
}

/** Deepest nesting of brackets outside strings; counting stops past the limit. */
function jsonDepth(payload: Uint8Array): number {
  let depth = 0;
  let quoted = false;
  for (let i = 0; i < payload.length && depth <= SENML_LIMITS.depth; i += 1) {
    const byte = payload[i]!;
    if (quoted) {
      if (byte === 0x5c) i += 1;
      else if (byte === 0x22) quoted = false;
    } else if (byte === 0x22) quoted = true;
    else if (byte === 0x5b || byte === 0x7b) depth += 1;
    else if (byte === 0x5d || byte === 0x7d) depth -= 1;
  }
  return depth;
}

function parseCbor(payload: Uint8Array): Result<Fields[]> {
  const first = payload[0];
  if (first !== undefined && !ARRAY_OR_TAG.has(first >> 5)) {
    return refuse('MESSAGE_ENCODING', 'begins neither as a JSON array nor as a CBOR array');
  }
  const decoded = decodeCbor(payload);
  if (!decoded.ok) return decoded;
  const pack = decoded.value;
  if (!Array.isArray(pack))
    return refuse('MESSAGE_SHAPE', `expected an array of SenML records, found ${describe(pack)}`);
  const records: Fields[] = [];
  for (const [index, record] of pack.entries()) {
    if (!(record instanceof Map)) {
      return refuse('MESSAGE_SHAPE', `expected a SenML record, found ${describe(record)}`, `record ${index}`);
    }
    records.push(named(record));
  }
  return accept(records);
}

function named(record: CborMap): Fields {
  const fields = new Map<string, Cbor>();
  // Labels of text are extensions; a number without a meaning is one too.
  for (const [label, value] of record) {
    fields.set(typeof label === 'number' ? (CBOR_LABELS.get(label) ?? `#${label}`) : label, asNumber(value));
  }
  return fields;
}

const asNumber = (value: Cbor): Cbor => (typeof value === 'bigint' ? Number(value) : value);

const isFinite = (value: unknown): value is number => typeof value === 'number' && Number.isFinite(value);

/** What was found, in a few characters. */
function told(value: unknown): string {
  return (
    typeof value === 'string' ? JSON.stringify(value) : typeof value === 'number' ? String(value) : typeof value
  ).slice(0, 40);
}
