/**
 * CRC-32C (Castagnoli, polynomial 0x1EDC6F41, reflected), as in RFC 3720 appendix B.4, eight bytes a step
 * (Kounavis and Berry 2008, "slicing-by-8").
 *
 * @param bytes what to check
 * @param from checksum of what went before, to check in pieces
 * @returns unsigned 32-bit checksum
 * @example crc32c(Buffer.from('123456789')) // 0xe3069283
 */
export function crc32c(bytes: Uint8Array, from = 0): number {
  let crc = ~from;
  let i = 0;
  for (const whole = bytes.length - 7; i < whole; i += 8) {
    const low = crc ^ (bytes[i]! | (bytes[i + 1]! << 8) | (bytes[i + 2]! << 16) | (bytes[i + 3]! << 24));
    crc =
      TABLE[1792 + (low & 255)]! ^
      TABLE[1536 + ((low >>> 8) & 255)]! ^
      TABLE[1280 + ((low >>> 16) & 255)]! ^
      TABLE[1024 + (low >>> 24)]! ^
      TABLE[768 + bytes[i + 4]!]! ^
      TABLE[512 + bytes[i + 5]!]! ^
      TABLE[256 + bytes[i + 6]!]! ^
      TABLE[bytes[i + 7]!]!;
  }
  for (; i < bytes.length; i += 1) crc = TABLE[(crc ^ bytes[i]!) & 255]! ^ (crc >>> 8);
  return ~crc >>> 0;
}

/** Eight tables of 256, one after the other: table k advances a byte by k further zero bytes. */
const TABLE = tables();

function tables(): Int32Array {
  const table = new Int32Array(8 * 256);
  for (let byte = 0; byte < 256; byte += 1) {
    let crc = byte;
    for (let bit = 0; bit < 8; bit += 1) crc = (crc >>> 1) ^ (crc & 1 ? 0x82f63b78 : 0);
    table[byte] = crc;
  }
  for (let k = 1; k < 8; k += 1) {
    for (let byte = 0; byte < 256; byte += 1) {
      const before = table[(k - 1) * 256 + byte]!;
      table[k * 256 + byte] = (before >>> 8) ^ table[before & 255]!;
    }
  }
  return table;
}
