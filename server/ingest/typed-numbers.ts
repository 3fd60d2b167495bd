import type { TypedNumbers } from './cbor.ts';
import { readHalf } from './cbor.ts';

/**
 * RFC 8746 section 2.1: the tag of a typed array is 0b010_f_s_e_ll (float, signed, little-endian, size), so that each
 * layout has a number of its own. The 64-bit integers and 128-bit floats are left out: no logger samples so.
 */
type Kind = 'u8' | 'i8' | 'u16' | 'i16' | 'u32' | 'i32' | 'f16' | 'f32' | 'f64';

const LAYOUTS: ReadonlyMap<number, { kind: Kind; little: boolean }> = new Map([
  [64, { kind: 'u8', little: true }],
  [65, { kind: 'u16', little: false }],
  [66, { kind: 'u32', little: false }],
  [68, { kind: 'u8', little: true }],
  [69, { kind: 'u16', little: true }],
  [70, { kind: 'u32', little: true }],
  [72, { kind: 'i8', little: true }],
  [73, { kind: 'i16', little: false }],
  [74, { kind: 'i32', little: false }],
  [77, { kind: 'i16', little: true }],
  [78, { kind: 'i32', little: true }],
  [80, { kind: 'f16', little: false }],
  [81, { kind: 'f32', little: false }],
  [82, { kind: 'f64', little: false }],
  [84, { kind: 'f16', little: true }],
  [85, { kind: 'f32', little: true }],
  [86, { kind: 'f64', little: true }],
]);

const SIZE: Readonly<Record<Kind, number>> = { u8: 1, i8: 1, u16: 2, i16: 2, u32: 4, i32: 4, f16: 2, f32: 4, f64: 8 };

/** How many numbers the bytes hold; null where the layout is not taken or the bytes are no whole number of them. */
export function countOf({ tag, bytes }: TypedNumbers): number | null {
  const layout = LAYOUTS.get(tag);
  if (layout === undefined || bytes.length % SIZE[layout.kind] !== 0) return null;
  return bytes.length / SIZE[layout.kind];
}

/**
 * The numbers as doubles. Little-endian bytes that lie aligned are read in place. The result owns its memory, so it
 * can be handed to another thread while the message is still being written to the journal.
 *
 * @param numbers for which `countOf` gave a count
 * @param scale factor on each number, default 1
 * @example toDoubles({ tag: 85, bytes: Uint8Array.of(0, 0, 0xc0, 0x3f) }) // Float64Array [1.5]
 */
export function toDoubles(numbers: TypedNumbers, scale = 1): Float64Array {
  const layout = LAYOUTS.get(numbers.tag);
  if (layout === undefined) throw new RangeError(`no layout for tag ${numbers.tag}`);
  const { kind, little } = layout;
  const doubles = little ? inPlace(kind, aligned(numbers.bytes, SIZE[kind])) : swapped(kind, numbers.bytes);
  if (scale === 1) return doubles;
  const scaled = new Float64Array(doubles.length);
  for (let i = 0; i < scaled.length; i += 1) scaled[i] = doubles[i]! * scale;
  return scaled;
}

function aligned(bytes: Uint8Array, size: number): Uint8Array {
  return bytes.byteOffset % size === 0 ? bytes : new Uint8Array(bytes);
}

/** Typed arrays are little-endian on every platform Node runs on. */
function inPlace(kind: Kind, { buffer, byteOffset, byteLength }: Uint8Array): Float64Array {
  const length = byteLength / SIZE[kind];
  switch (kind) {
    case 'u8':
      return new Float64Array(new Uint8Array(buffer, byteOffset, length));
    case 'i8':
      return new Float64Array(new Int8Array(buffer, byteOffset, length));
    case 'u16':
      return new Float64Array(new Uint16Array(buffer, byteOffset, length));
    case 'i16':
      return new Float64Array(new Int16Array(buffer, byteOffset, length));
    case 'u32':
      return new Float64Array(new Uint32Array(buffer, byteOffset, length));
    case 'i32':
      return new Float64Array(new Int32Array(buffer, byteOffset, length));
    case 'f16':
      return Float64Array.from(new Uint16Array(buffer, byteOffset, length), readHalf);
    case 'f32':
      return new Float64Array(new Float32Array(buffer, byteOffset, length));
    case 'f64':
      return new Float64Array(new Float64Array(buffer, byteOffset, length));
  }
}

/** Big-endian bytes: turned round in a copy, then read in place. */
function swapped(kind: Kind, bytes: Uint8Array): Float64Array {
  // A Buffer of its own, aligned: small ones from the pool are not.
  const copy = Buffer.from(new Uint8Array(bytes).buffer);
  if (SIZE[kind] === 2) copy.swap16();
  else if (SIZE[kind] === 4) copy.swap32();
  else copy.swap64();
  return inPlace(kind, copy);
}
