import { describe, expect, it } from 'vitest';
import { decodeFrame, encodeFrame, type FrameHeader } from '#core/contract/frame.ts';

const text = (bytes: Uint8Array): string => new TextDecoder().decode(bytes);

function header(sensor: string, change: Partial<FrameHeader['channels'][number]> = {}): FrameHeader {
  const channel = { sensor, startMicros: 1_796_101_200_000_000, stepMicros: 2000, count: 3, at: 0, ...change };
  return { bridge: 'b', kind: 'record', layout: 'samples', channels: [channel] };
}

describe('a binary frame', () => {
  it.each(['A1', 'Brücke', '桥', '🚆', 'Ωλ-中'])(
    'comes back as it was, whatever the name of its sensor: %s',
    (name) => {
      const data = Float32Array.of(1.5, NaN, -2);
      const frame = decodeFrame(encodeFrame(header(name), data), text);
      expect(frame.header).toEqual(header(name));
      expect(frame.data).toEqual(data);
    },
  );

  it('may lie at any place of a larger buffer', () => {
    const bytes = encodeFrame(header('A1'), Float32Array.of(1, 2, 3));
    const larger = new Uint8Array(bytes.length + 7);
    larger.set(bytes, 5);
    expect([...decodeFrame(larger.subarray(5, 5 + bytes.length), text).data]).toEqual([1, 2, 3]);
  });

  it('is refused when it is shorter than it says', () => {
    const bytes = encodeFrame(header('A1'), Float32Array.of(1, 2, 3));
    expect(() => decodeFrame(bytes.subarray(0, 3), text)).toThrow('has no header');
    expect(() => decodeFrame(bytes.subarray(0, 20), text)).toThrow('frame header of');
    expect(() => decodeFrame(bytes.subarray(0, bytes.length - 4), text)).toThrow('cut in channel A1');
    const pairs = encodeFrame({ ...header('A1'), layout: 'envelope' }, Float32Array.of(1, 2, 3));
    expect(() => decodeFrame(pairs, text)).toThrow(RangeError);
  });
});
