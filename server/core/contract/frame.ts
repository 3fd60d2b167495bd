/**
 * Binary frame for samples and envelopes, used by the live push and by the wave-form route alike:
 *
 *   u32 little-endian length of the header | header, JSON in UTF-8 | zero to three bytes of padding to a
 *   multiple of four | float32 little-endian data
 *
 * `data` of a channel starts `at` floats into the data and is `count` values (`samples`) or `count` pairs
 * min, max (`envelope`). NaN stands for "no sample".
 */
export interface FrameHeader {
  bridge: string;
  /** `live` envelopes are in the live band; `record` is a passage's calibrated wave form. */
  kind: 'live' | 'record';
  layout: 'samples' | 'envelope';
  channels: FrameChannel[];
}

export interface FrameChannel {
  sensor: string;
  startMicros: number;
  /** Time from one value or pair to the next; may be fractional for samples. */
  stepMicros: number;
  count: number;
  at: number;
}

export interface Frame {
  header: FrameHeader;
  data: Float32Array;
}

const LIMIT_HEADER_BYTES = 256 * 1024;

/** @returns the frame's bytes */
export function encodeFrame(header: FrameHeader, data: Float32Array): Uint8Array {
  const json = utf8(JSON.stringify(header));
  const dataAt = 4 + json.length + ((4 - (json.length % 4)) % 4);
  const bytes = new Uint8Array(dataAt + data.byteLength);
  const view = new DataView(bytes.buffer);
  view.setUint32(0, json.length, true);
  bytes.set(json, 4);
  // TypedArrays are little-endian on every platform Node and browsers run on.
  bytes.set(new Uint8Array(data.buffer, data.byteOffset, data.byteLength), dataAt);
  return bytes;
}

/**
 * @param bytes a whole frame
 * @param decodeText UTF-8 decoder, handed in since the core has no platform globals
 * @throws RangeError where the frame is shorter than it says
 */
export function decodeFrame(bytes: Uint8Array, decodeText: (bytes: Uint8Array) => string): Frame {
  if (bytes.length < 4) throw new RangeError(`frame of ${bytes.length} bytes has no header`);
  const length = new DataView(bytes.buffer, bytes.byteOffset, 4).getUint32(0, true);
  if (length > LIMIT_HEADER_BYTES || 4 + length > bytes.length) {
    throw new RangeError(`frame header of ${length} bytes in a frame of ${bytes.length}`);
  }
  const header = JSON.parse(decodeText(bytes.subarray(4, 4 + length))) as FrameHeader;
  const dataAt = 4 + length + ((4 - (length % 4)) % 4);
  const data = new Float32Array(bytes.slice(dataAt).buffer);
  for (const channel of header.channels) {
    const values = channel.count * (header.layout === 'envelope' ? 2 : 1);
    if (channel.at + values > data.length) throw new RangeError(`frame is cut in channel ${channel.sensor}`);
  }
  return { header, data };
}

/** UTF-8 without a platform's TextEncoder. */
function utf8(text: string): Uint8Array {
  const bytes: number[] = [];
  for (const character of text) {
    const point = character.codePointAt(0) ?? 0;
    if (point < 0x80) bytes.push(point);
    else if (point < 0x800) bytes.push(0xc0 | (point >> 6), 0x80 | (point & 63));
    else if (point < 0x10000) bytes.push(0xe0 | (point >> 12), 0x80 | ((point >> 6) & 63), 0x80 | (point & 63));
    else {
      bytes.push(0xf0 | (point >> 18), 0x80 | ((point >> 12) & 63), 0x80 | ((point >> 6) & 63), 0x80 | (point & 63));
    }
  }
  return Uint8Array.from(bytes);
}
