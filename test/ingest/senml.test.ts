import { existsSync, readFileSync } from 'node:fs';
import { Encoder } from 'cbor-x';
import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { decodeMessage, type Decoded } from '../../server/ingest/decode.ts';
import { decodeSenml, SENML_LIMITS, type SenmlMessage } from '../../server/ingest/senml-payload.ts';
import { codes, directoryOf, hex, NOW } from './specimen.ts';

/** Maps as plain maps, without the tag 259 that marks a JavaScript Map. */
const encoder = new Encoder({ mapsAsObjects: false, useRecords: false });
const encode = (value: unknown): Buffer => encoder.encode(value);

const directory = directoryOf();
const TOPIC = 'spanbeat/specimen/L1/senml';
const NOW_S = NOW / 1e6;

const json = (pack: unknown): Uint8Array => Buffer.from(JSON.stringify(pack));

function read(payload: Uint8Array, now: number | null = NOW): SenmlMessage {
  const result = decodeSenml(payload, now);
  if (!result.ok) throw new Error(`${result.complaint.code}: ${result.complaint.detail}`);
  return result.value;
}

function codeOf(payload: Uint8Array): string {
  const result = decodeSenml(payload, NOW);
  return result.ok ? 'accepted' : result.complaint.code;
}

const take = (pack: unknown, topic = TOPIC): Decoded => decodeMessage(directory, topic, json(pack), { nowMicros: NOW });

/** RFC 8428 section 5.1.2: multiple data points. */
const EXAMPLE = [
  { bn: 'urn:dev:ow:10e2073a01080063:', bt: 1.276020076001e9, bu: 'A', bver: 5, n: 'voltage', u: 'V', v: 120.1 },
  { n: 'current', t: -5, v: 1.2 },
  { n: 'current', t: -4, v: 1.3 },
  { n: 'current', t: -3, v: 1.4 },
  { n: 'current', t: -2, v: 1.5 },
  { n: 'current', t: -1, v: 1.6 },
  { n: 'current', v: 1.7 },
];

/** The same pack in CBOR, after RFC 8428 section 6, from memory; the length of the base name is that of its 28 bytes. */
const EXAMPLE_CBOR = hex(`
  87 a7 21 78 1c 75 72 6e 3a 64 65 76 3a 6f 77 3a 31 30 65 32 30 37 33 61 30 31 30 38 30 30 36 33
  3a 22 fb 41 d3 03 a1 5b 00 10 62 23 61 41 20 05 00 67 76 6f 6c 74 61 67 65 01 61 56 02 fb 40 5e
  06 66 66 66 66 66 a3 00 67 63 75 72 72 65 6e 74 06 24 02 fb 3f f3 33 33 33 33 33 33 a3 00 67 63
  75 72 72 65 6e 74 06 23 02 fb 3f f4 cc cc cc cc cc cd a3 00 67 63 75 72 72 65 6e 74 06 22 02 fb
  3f f6 66 66 66 66 66 66 a3 00 67 63 75 72 72 65 6e 74 06 21 02 f9 3e 00 a3 00 67 63 75 72 72 65
  6e 74 06 20 02 fb 3f f9 99 99 99 99 99 9a a3 00 67 63 75 72 72 65 6e 74 06 00 02 fb 3f fb 33 33
  33 33 33 33`);

describe('decodeSenml', () => {
  it('resolves the example of RFC 8428 section 5.1.2 as its section 4.6 says', () => {
    const { records, leftOut } = read(json(EXAMPLE));
    expect(leftOut).toEqual([]);
    const base = 1_276_020_076_001_000;
    expect(records.map(({ name, micros, unit, value }) => [name, micros, unit, value])).toEqual([
      ['urn:dev:ow:10e2073a01080063:voltage', base, 'V', 120.1],
      ['urn:dev:ow:10e2073a01080063:current', base - 5_000_000, 'A', 1.2],
      ['urn:dev:ow:10e2073a01080063:current', base - 4_000_000, 'A', 1.3],
      ['urn:dev:ow:10e2073a01080063:current', base - 3_000_000, 'A', 1.4],
      ['urn:dev:ow:10e2073a01080063:current', base - 2_000_000, 'A', 1.5],
      ['urn:dev:ow:10e2073a01080063:current', base - 1_000_000, 'A', 1.6],
      ['urn:dev:ow:10e2073a01080063:current', base, 'A', 1.7],
    ]);
  });

  it('reads the CBOR example of RFC 8428 section 6 as the same records', () => {
    expect(read(EXAMPLE_CBOR)).toEqual(read(json(EXAMPLE)));
  });

  const CHECKS = new URL('../../../shared/reference/checks.json', import.meta.url);
  it.runIf(existsSync(CHECKS))('knows the CBOR labels of the reference sheet', () => {
    const sheet = JSON.parse(readFileSync(CHECKS, 'utf8')) as {
      checks: { id: string; expected: { senml_cbor_key_map: Record<string, number> } }[];
    };
    const labels = sheet.checks.find(({ id }) => id === 'enc.bytes')!.expected.senml_cbor_key_map;
    const record = (fields: Record<string, unknown>): Uint8Array =>
      encode([new Map(Object.entries(fields).map(([label, value]) => [labels[label]!, value]))]);
    expect(read(record({ bver: 10, bn: 'x:', bt: NOW_S, bu: 'Cel', bv: 2, n: 'T1', v: 1, t: 0.5, ut: 5 }))).toEqual({
      records: [{ name: 'x:T1', ownName: 'T1', micros: NOW + 500_000, value: 3, unit: 'Cel' }],
      leftOut: [],
    });
    const reasons = ['vs', 'vb', 'vd', 's'].map((label) => read(record({ n: 'T1', [label]: 1 })).leftOut[0]?.detail);
    expect(reasons.map((reason) => reason?.split(' ')[1])).toEqual(['text', 'boolean', 'data', 'sum']);
    expect(read(record({ n: 'T1', v: 1, bs: 3, s: 2 })).leftOut[0]?.detail).toContain('sum');
  });

  it('takes times below 2^28 s as relative to the arrival (section 4.5.3), and none where it is not known', () => {
    const at = (t: number, now: number | null = NOW): number | undefined =>
      read(json([{ n: 'T1', v: 1, t }]), now).records[0]?.micros;
    expect(at(0)).toBe(NOW);
    expect(at(-5.5)).toBe(NOW - 5_500_000);
    expect(at(2 ** 28 - 1)).toBe(NOW + (2 ** 28 - 1) * 1e6);
    expect(at(2 ** 28)).toBe(2 ** 28 * 1e6);
    expect(at(0, null)).toBeUndefined();
  });

  it('reads a base time and small steps to the microsecond', () => {
    const { records } = read(
      json([
        { bn: 'T', bt: 1_796_101_200.25, n: '1', v: 0, t: 0.000001 },
        { n: '1', v: 0, t: 0.000002 },
      ]),
    );
    expect(records.map(({ micros }) => micros)).toEqual([1_796_101_200_250_001, 1_796_101_200_250_002]);
  });

  it('leaves out what is no number, and keeps the numbers beside it', () => {
    const { records, leftOut } = read(
      json([
        { n: 'a', vs: 'text' },
        { n: 'a', vb: true },
        { n: 'a', vd: 'AQ' },
        { n: 'a', v: '1' },
        { n: 'a', v: null },
        { n: 'a' },
        { v: 1 },
        { n: 'ä', v: 1 },
        { n: 'a', v: 1, t: 'now' },
        { n: 'a', v: 1, u: 5 },
        { n: 'b', v: 2 },
        { n: 'b', bv: 1 },
      ]),
    );
    expect(records.map(({ name, value }) => [name, value])).toEqual([
      ['b', 2],
      ['b', 1],
    ]);
    expect(leftOut.reduce((sum, { count }) => sum + count, 0)).toBe(10);
  });

  it.each<[string, Uint8Array, string]>([
    ['no array', json({ n: 'T1', v: 1 }), 'MESSAGE_SHAPE'],
    ['an array of numbers', json([1]), 'MESSAGE_SHAPE'],
    ['a version above 10', json([{ bver: 11, n: 'T1', v: 1 }]), 'MESSAGE_SHAPE'],
    ['a label that must be understood', json([{ n: 'T1', v: 1, must_: 1 }]), 'MESSAGE_SHAPE'],
    ['a base time in text', json([{ bt: '1', n: 'T1', v: 1 }]), 'MESSAGE_SHAPE'],
    // The parser cannot always tell an early end from a slip of the encoder; either word sends the reader to the logger.
    ['JSON that ends early', Buffer.from('[{"n":"T1","v":1'), 'MESSAGE_ENCODING'],
    ['JSON that ends in a string', Buffer.from('[{"n":"T1'), 'MESSAGE_TRUNCATED'],
    ['JSON that is none', Buffer.from('[{n:1}]'), 'MESSAGE_ENCODING'],
    ['UTF-8 that is none', Buffer.from([0x5b, 0x22, 0xc3, 0x28, 0x22, 0x5d]), 'MESSAGE_ENCODING'],
    ['10 000 levels', Buffer.from('['.repeat(10_000)), 'MESSAGE_DEPTH'],
    ['too many records', json(Array.from({ length: SENML_LIMITS.records + 1 }, () => ({}))), 'MESSAGE_TOO_LARGE'],
    ['too many bytes', Buffer.alloc(SENML_LIMITS.bytes + 1, ' '), 'MESSAGE_TOO_LARGE'],
    ['CBOR that ends early', EXAMPLE_CBOR.subarray(0, 50), 'MESSAGE_TRUNCATED'],
    ['a CBOR array of text', encode(['a']), 'MESSAGE_SHAPE'],
    ['nothing', new Uint8Array(0), 'MESSAGE_TRUNCATED'],
    ['plain text', Buffer.from('xx'), 'MESSAGE_ENCODING'],
  ])('refuses a pack with %s', (_what, payload, code) => {
    expect(codeOf(payload)).toBe(code);
  });

  it('reads no field from the prototype of a record', () => {
    expect(read(json([{ n: 'constructor' }])).records).toEqual([]);
    // RFC 8428 section 4.4: a label that ends in an underscore must be understood, and this one is not.
    expect(codeOf(Buffer.from('[{"__proto__":{"v":1},"n":"a"}]'))).toBe('MESSAGE_SHAPE');
  });

  it('never throws, whatever bytes of a pack are changed', () => {
    const packs = [json(EXAMPLE), EXAMPLE_CBOR];
    fc.assert(
      fc.property(
        fc.constantFrom(...packs),
        fc.array(fc.tuple(fc.nat(400), fc.nat(255)), { minLength: 1, maxLength: 5 }),
        (pack, changes) => {
          const bytes = Uint8Array.from(pack);
          for (const [at, value] of changes) bytes[at % bytes.length] = value;
          decodeSenml(bytes, NOW);
        },
      ),
      { numRuns: 5000 },
    );
  });
});

describe('decodeMessage of SenML', () => {
  it('puts evenly spaced records of a sensor together at its rate, and sensors of the same times into one block', () => {
    const records = Array.from({ length: 50 }, (_, i) => [
      { n: 'A1', v: i, t: NOW_S - 1 + i / 500 },
      { n: 'A2', v: -i, t: NOW_S - 1 + i / 500 },
    ]).flat();
    const { blocks, complaints } = take(records);
    expect(complaints).toEqual([]);
    expect(blocks).toHaveLength(1);
    expect(blocks[0]).toMatchObject({ startMicros: NOW - 1_000_000, rateHz: 500, sequence: null });
    expect(blocks[0]!.channels.map(({ sensor }) => sensor)).toEqual(['A1', 'A2']);
    expect([...blocks[0]!.channels[0]!.samples]).toEqual(Array.from({ length: 50 }, (_, i) => i));
  });

  it('begins a new block after a gap, and puts records in order', () => {
    const times = [0, 1, 2, 7, 8, 3].map((i) => NOW_S - 1 + i / 100);
    const { blocks } = take(times.map((t, i) => ({ n: 'S1', v: i, t })));
    expect(blocks.map(({ startMicros, channels }) => [startMicros - NOW + 1e6, [...channels[0]!.samples]])).toEqual([
      [0, [0, 1, 2, 5]],
      [70_000, [3, 4]],
    ]);
  });

  it('takes times rounded to milliseconds at 300 Hz', () => {
    const definition = structuredClone(directory.bridge('specimen')!);
    definition.sensors[0]!.rateHz = 300;
    const pack = Array.from({ length: 300 }, (_, i) => ({
      n: 'A1',
      v: i,
      t: NOW_S - 2 + Math.round((i / 300) * 1000) / 1000,
    }));
    const { blocks, complaints } = decodeMessage(directoryOf(definition), TOPIC, json(pack), { nowMicros: NOW });
    expect(complaints).toEqual([]);
    expect(blocks.map(({ channels }) => channels[0]!.samples.length)).toEqual([300]);
  });

  it('refuses a sensor that comes at another rate, and takes slow values when they like to come', () => {
    const fast = Array.from({ length: 100 }, (_, i) => ({ n: 'S1', v: i, t: NOW_S - 2 + i / 98 }));
    const slow = [0, 0.3, 17].map((t) => ({ n: 'T1', v: 20, t: NOW_S - 30 + t }));
    const { blocks, complaints } = take([...fast, ...slow]);
    expect(codes(complaints)).toEqual(['RATE_WRONG']);
    expect(blocks.map(({ channels }) => channels[0]!.sensor)).toEqual(['T1', 'T1', 'T1']);
  });

  it('converts a unit of the same quantity to that of the definition, and refuses any other', () => {
    const value = (n: string, u: string, v: number): number | string => {
      const { blocks, complaints } = take([{ n, u, v }]);
      return blocks[0]?.channels[0]?.samples[0] ?? codes(complaints).join();
    };
    expect(value('A1', 'm/s2', 2)).toBe(2);
    expect(value('A1', 'g', 1)).toBeCloseTo(9.80665, 12); // CGPM 1901
    expect(value('A2', 'm/s2', 9.80665)).toBeCloseTo(1000, 9);
    expect(value('A2', 'mg', 3)).toBe(3);
    expect(value('T1', 'K', 273.15)).toBeCloseTo(0, 12);
    expect(value('S1', 'm/m', 1e-6)).toBeCloseTo(1, 12);
    expect(value('A1', 'Cel', 1)).toBe('UNIT_UNKNOWN');
    expect(value('T1', 'furlong', 1)).toBe('UNIT_UNKNOWN');
    expect(value('A1', '__proto__', 1)).toBe('UNIT_UNKNOWN');
  });

  it("finds the sensor by whole name, base and own name, end of a URN, or the logger's own map", () => {
    const sensor = (pack: unknown, topic = TOPIC): string | undefined =>
      take(pack, topic).blocks[0]?.channels[0]?.sensor;
    expect(sensor([{ n: 'T1', v: 1 }])).toBe('T1');
    expect(sensor([{ bn: 'specimen/L1/', n: 'T1', v: 1 }])).toBe('T1');
    expect(sensor([{ bn: 'urn:dev:mac:0024befffe804ff1', n: 'T1', v: 1 }])).toBe('T1');
    expect(sensor([{ n: 'urn:dev:mac:0024befffe804ff1_T1', v: 1 }])).toBe('T1');
    expect(sensor([{ n: 'urn:dev:ow:10e2073a01080063:T1', v: 1 }])).toBe('T1');
    expect(sensor([{ bn: 'dev:', n: 'acc_x', v: 1 }], 'site/7/raw')).toBe('B1');
    expect(sensor([{ n: 'XT1', v: 1 }])).toBeUndefined();
    expect(sensor([{ n: 'B1', v: 1 }])).toBeUndefined();
  });

  it('keeps the good records beside those of an unknown sensor, a wrong unit, and a wrong time', () => {
    const { blocks, complaints } = take([
      { n: 'nobody', v: 1 },
      { n: 'nobody', v: 2 },
      { n: 'A1', u: 'Cel', v: 1 },
      { n: 'S1', v: 1, t: 300_000_000 },
      { n: 'T1', v: 21.5 },
      { n: 'T1', vs: 'warm' },
    ]);
    expect(blocks.map(({ channels }) => channels)).toEqual([[{ sensor: 'T1', samples: Float64Array.of(21.5) }]]);
    expect(codes(complaints).sort()).toEqual(['MESSAGE_SHAPE', 'SENSOR_UNKNOWN', 'TIME_OUT_OF_RANGE', 'UNIT_UNKNOWN']);
  });

  it('gives a sensor that is named twice at one time two blocks, for the pipeline to count', () => {
    const { blocks } = take([
      { n: 'T1', v: 1 },
      { n: 'T1', v: 2 },
    ]);
    expect(blocks.map(({ channels }) => channels[0]!.samples[0])).toEqual([1, 2]);
  });
});
