import { existsSync, readFileSync } from 'node:fs';
import { Encoder } from 'cbor-x';
import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { CBOR_LIMITS, decodeCbor, type Cbor } from '../../server/ingest/cbor.ts';
import { toDoubles } from '../../server/ingest/typed-numbers.ts';
import { hex } from './specimen.ts';

/** Maps as plain maps, without the tag 259 that marks a JavaScript Map. */
const encoder = new Encoder({ mapsAsObjects: false, useRecords: false });
const encode = (value: unknown): Buffer => encoder.encode(value);

const CHECKS = new URL('../../../shared/reference/checks.json', import.meta.url);

function decoded(bytes: Uint8Array): Cbor {
  const result = decodeCbor(bytes);
  if (!result.ok) throw new Error(`${result.complaint.code}: ${result.complaint.detail}`);
  return result.value;
}

function codeOf(bytes: Uint8Array): string {
  const result = decodeCbor(bytes);
  return result.ok ? 'accepted' : result.complaint.code;
}

describe('decodeCbor', () => {
  // RFC 8949 appendix A.
  it.each<[string, Cbor]>([
    ['00', 0],
    ['1818', 24],
    ['1903e8', 1000],
    ['1a000f4240', 1_000_000],
    ['1b000000e8d4a51000', 1_000_000_000_000],
    ['1bffffffffffffffff', 18_446_744_073_709_551_615n],
    ['3bffffffffffffffff', -18_446_744_073_709_551_616n],
    ['20', -1],
    ['3903e7', -1000],
    ['f90000', 0],
    ['f93c00', 1],
    ['fb3ff199999999999a', 1.1],
    ['f93e00', 1.5],
    ['f97bff', 65_504],
    ['fa47c35000', 100_000],
    ['fb7e37e43c8800759c', 1e300],
    ['f90001', 5.960464477539063e-8],
    ['f90400', 0.00006103515625],
    ['f9c400', -4],
    ['f97c00', Infinity],
    ['f97e00', NaN],
    ['f9fc00', -Infinity],
    ['f4', false],
    ['f5', true],
    ['f6', null],
    ['f7', undefined],
    ['6449455446', 'IETF'],
    ['62c3bc', 'ü'],
    ['64f0908591', '\u{10151}'],
    ['80', []],
    ['83010203', Float64Array.of(1, 2, 3)],
    ['a0', new Map()],
    ['9fff', []],
    ['9f0102ff', Float64Array.of(1, 2)],
    [
      'bf61610161629f0203ffff',
      new Map<string, Cbor>([
        ['a', 1],
        ['b', Float64Array.of(2, 3)],
      ]),
    ],
    ['7f657374726561646d696e67ff', 'streaming'],
    ['5f42010243030405ff', Uint8Array.of(1, 2, 3, 4, 5)],
    ['d9d9f783010203', Float64Array.of(1, 2, 3)],
    ['c48221196ab3', 273.15],
  ])('reads the example %s of RFC 8949', (bytes, value) => {
    expect(decoded(hex(bytes))).toEqual(value);
  });

  it.runIf(existsSync(CHECKS))('reads the bytes of the reference sheet', () => {
    const sheet = JSON.parse(readFileSync(CHECKS, 'utf8')) as {
      checks: { id: string; expected: Record<string, string> }[];
    };
    const bytes = sheet.checks.find(({ id }) => id === 'enc.bytes')!.expected;
    expect(decoded(hex(bytes['cbor_float64_1p1']!))).toBe(1.1);
    expect(decoded(hex(bytes['cbor_float16_1p5']!))).toBe(1.5);
    expect(decoded(hex(bytes['cbor_uint_1000000']!))).toBe(1_000_000);
    expect(decoded(hex(bytes['cbor_neg_1000']!))).toBe(-1000);
    expect(decoded(hex(bytes['cbor_array_1_2_3']!))).toEqual(Float64Array.of(1, 2, 3));
    expect(decoded(hex(bytes['cbor_map']!))).toEqual(
      new Map<string, Cbor>([
        ['a', 1],
        ['b', Float64Array.of(2, 3)],
      ]),
    );
    const floats = decoded(hex(bytes['cbor_float32le_typed_array_1p5_m2']!)) as { tag: number; bytes: Uint8Array };
    expect(toDoubles(floats)).toEqual(Float64Array.of(1.5, -2));
    const integers = decoded(hex(bytes['cbor_int16le_1_m1']!)) as { tag: number; bytes: Uint8Array };
    expect(toDoubles(integers)).toEqual(Float64Array.of(1, -1));
  });

  it.each([
    ['a text string that is not UTF-8', '62c328', 'MESSAGE_ENCODING'],
    ['a key that occurs twice', 'a2616101616102', 'MESSAGE_ENCODING'],
    ['bytes after the end', '0000', 'MESSAGE_ENCODING'],
    ['a reserved length code', '1c', 'MESSAGE_ENCODING'],
    ['a break where none belongs', 'ff', 'MESSAGE_ENCODING'],
    ['a map as a key', 'a1a000', 'MESSAGE_ENCODING'],
    ['a string of 2^63 bytes', '5b7fffffffffffffff', 'MESSAGE_TRUNCATED'],
    ['an array of 2^64 items', '9bffffffffffffffff00', 'MESSAGE_TRUNCATED'],
    ['a map of 2^32 keys', 'ba ffffffff 00', 'MESSAGE_TRUNCATED'],
    ['a typed array of 4 GB', 'd855 5affffffff 00', 'MESSAGE_TRUNCATED'],
    ['nothing', '', 'MESSAGE_TRUNCATED'],
    ['a tag with a meaning of its own', 'c11a514b67b0', 'MESSAGE_SHAPE'],
    ['a number under a typed array tag', 'd85500', 'MESSAGE_SHAPE'],
    ['a chunk of another type in a string', '7f4101ff', 'MESSAGE_ENCODING'],
  ])('refuses %s', (_what, bytes, code) => {
    expect(codeOf(hex(bytes))).toBe(code);
  });

  it('refuses nesting of 10 000 levels, of arrays, maps and tags, without descending', () => {
    for (const opener of [0x81, 0x9f, 0xc4]) {
      expect(codeOf(new Uint8Array(10_000).fill(opener))).toBe('MESSAGE_DEPTH');
    }
    expect(codeOf(Uint8Array.from(Array.from({ length: 20_000 }, (_, i) => (i % 2 ? 0x00 : 0xa1))))).toBe(
      'MESSAGE_DEPTH',
    );
  });

  it('reads as many items as the limit and refuses one more', () => {
    const items = (count: number): Uint8Array => {
      const bytes = new Uint8Array(5 + count).fill(0x01);
      bytes[0] = 0x9a;
      new DataView(bytes.buffer).setUint32(1, count);
      return bytes;
    };
    expect(codeOf(items(CBOR_LIMITS.items - 1))).toBe('accepted');
    expect(codeOf(items(CBOR_LIMITS.items))).toBe('MESSAGE_TOO_LARGE');
  });

  it('calls every proper prefix of a message truncated', () => {
    const message = encode({ start: 1, rate: 500.5, channels: { A1: Float32Array.of(1, 2, 3) }, name: 'straße' });
    for (let length = 0; length < message.length; length += 1) {
      expect(codeOf(message.subarray(0, length))).toBe('MESSAGE_TRUNCATED');
    }
  });

  it('agrees with an independent encoder on values of all kinds', () => {
    // That encoder writes −0 as the integer 0.
    const number = fc.double().map((value) => (value === 0 ? 0 : value));
    const leaf = fc.oneof(fc.integer(), number, fc.string({ unit: 'grapheme' }), fc.boolean(), fc.constant(null));
    const maps = fc.dictionary(fc.string(), fc.oneof(leaf, fc.array(fc.string(), { maxLength: 5 })), { maxKeys: 10 });
    fc.assert(
      fc.property(maps, (value) => {
        const entries = Object.entries(value);
        expect(decoded(encode(new Map(entries)))).toEqual(new Map(entries));
      }),
      { numRuns: 300 },
    );
  });

  it('never throws on random bytes', () => {
    fc.assert(
      fc.property(fc.uint8Array({ maxLength: 200 }), (bytes) => {
        decodeCbor(bytes);
      }),
      { numRuns: 5000 },
    );
  });
});

describe('toDoubles', () => {
  const KINDS = [
    { name: 'uint8', big: 64, little: 64, size: 1, set: 'setUint8', values: [0, 255] },
    { name: 'int8', big: 72, little: 72, size: 1, set: 'setInt8', values: [-128, 127] },
    { name: 'uint16', big: 65, little: 69, size: 2, set: 'setUint16', values: [0, 65_535] },
    { name: 'int16', big: 73, little: 77, size: 2, set: 'setInt16', values: [-32_768, 32_767, 1, -1] },
    { name: 'uint32', big: 66, little: 70, size: 4, set: 'setUint32', values: [0, 4_294_967_295] },
    { name: 'int32', big: 74, little: 78, size: 4, set: 'setInt32', values: [-2_147_483_648, 2_147_483_647] },
    { name: 'float32', big: 81, little: 85, size: 4, set: 'setFloat32', values: [1.5, -2, NaN, Infinity] },
    { name: 'float64', big: 82, little: 86, size: 8, set: 'setFloat64', values: [Math.PI, -1e300, NaN] },
  ] as const;

  for (const { name, big, little, size, set, values } of KINDS) {
    for (const offset of [0, 1, 3, 8]) {
      it(`reads ${name} in both byte orders at byte ${offset}, by the tags of RFC 8746`, () => {
        for (const littleEndian of [true, false]) {
          const bytes = new Uint8Array(offset + size * values.length);
          const view = new DataView(bytes.buffer);
          values.forEach((value, i) => view[set](offset + i * size, value, littleEndian));
          const numbers = { tag: littleEndian ? little : big, bytes: bytes.subarray(offset) };
          expect(toDoubles(numbers)).toEqual(Float64Array.from(values));
          expect(toDoubles(numbers, 0.5)).toEqual(Float64Array.from(values, (value) => value * 0.5));
        }
      });
    }
  }

  it('reads float16', () => {
    expect(toDoubles({ tag: 80, bytes: hex('3e00c400') })).toEqual(Float64Array.of(1.5, -4));
    expect(toDoubles({ tag: 84, bytes: hex('003e00c4') })).toEqual(Float64Array.of(1.5, -4));
  });

  it('gives samples that do not share memory with the message', () => {
    const bytes = new Uint8Array(Float64Array.of(1, 2).buffer);
    const doubles = toDoubles({ tag: 86, bytes });
    bytes.fill(0);
    expect(doubles).toEqual(Float64Array.of(1, 2));
  });
});
