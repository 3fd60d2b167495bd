import { encode, Encoder } from 'cbor-x';
import fc from 'fast-check';
import { describe, expect, it } from 'vitest';
import { BLOCK_LIMITS } from '#core/contract/block.ts';
import { ERRORS } from '#core/contract/errors.ts';
import { EARLIEST_MICROS, sampleMicros } from '#core/contract/time.ts';
import { decodeMessage, type Decoded } from '../../server/ingest/decode.ts';
import { decodeSamples } from '../../server/ingest/samples-payload.ts';
import { decodeSenml } from '../../server/ingest/senml-payload.ts';
import { buildDirectory } from '../../server/ingest/topics.ts';
import { samplesPayload } from '../../simulator/payload.ts';
import { BRIDGE, codes, directoryOf, NOW } from './specimen.ts';

const directory = directoryOf();
const TOPIC = 'spanbeat/specimen/L1/samples';
const START = NOW - 1_000_000;

const take = (message: unknown, topic = TOPIC, nowMicros: number | null = NOW): Decoded =>
  decodeMessage(directory, topic, encode(message), { nowMicros });

const good = (): { start: number; rate: number; seq: number; channels: Record<string, unknown> } => ({
  start: START,
  rate: 500,
  seq: 7,
  channels: { A1: Float32Array.of(1, 2, 3), A2: Int16Array.of(-1, 0, 1) },
});

describe('decodeMessage of samples', () => {
  it('gives one block of all channels with the start, rate and number that the logger says', () => {
    expect(take(good())).toEqual({
      blocks: [
        {
          bridge: 'specimen',
          logger: 'L1',
          sequence: 7,
          startMicros: START,
          rateHz: 500,
          channels: [
            { sensor: 'A1', samples: Float64Array.of(1, 2, 3) },
            { sensor: 'A2', samples: Float64Array.of(-1, 0, 1) },
          ],
        },
      ],
      complaints: [],
    });
  });

  it('multiplies by one scale for all or by one a sensor', () => {
    const scaled = take({ ...good(), scale: 0.5 }).blocks[0]!.channels;
    expect(scaled.map(({ samples }) => [...samples])).toEqual([
      [0.5, 1, 1.5],
      [-0.5, 0, 0.5],
    ]);
    const single = take({ ...good(), scale: { A2: 10 } }).blocks[0]!.channels;
    expect(single.map(({ samples }) => [...samples])).toEqual([
      [1, 2, 3],
      [-10, 0, 10],
    ]);
  });

  it('takes plain arrays, empty channels, no number, and keys it does not know', () => {
    const message: Record<string, unknown> = { ...good() };
    delete message['seq'];
    const { blocks, complaints } = take({ ...message, firmware: '1.2', channels: { A1: [1, 2.5], A2: [] } });
    expect(complaints).toEqual([]);
    expect(blocks).toHaveLength(1);
    expect(blocks[0]!.sequence).toBeNull();
    expect(blocks[0]!.channels).toEqual([{ sensor: 'A1', samples: Float64Array.of(1, 2.5) }]);
  });

  it('puts channels of different lengths into blocks of their own', () => {
    const { blocks } = take({ ...good(), channels: { A1: [1, 2, 3], A2: [1, 2] } });
    expect(blocks.map(({ channels }) => channels.map(({ sensor }) => sensor))).toEqual([['A1'], ['A2']]);
  });

  it('keeps the good channels beside every kind of bad one', () => {
    const { blocks, complaints } = take({
      ...good(),
      channels: { A1: Float32Array.of(1), XX: Float32Array.of(1), A2: 'text', T1: Float32Array.of(1), B1: [1] },
    });
    expect(blocks).toHaveLength(1);
    expect(blocks[0]!.channels).toEqual([{ sensor: 'A1', samples: Float64Array.of(1) }]);
    expect(codes(complaints).sort()).toEqual(['MESSAGE_SHAPE', 'RATE_WRONG', 'SENSOR_UNKNOWN', 'SENSOR_UNKNOWN']);
  });

  it('turns values that are not finite into NaN and counts them', () => {
    const { blocks, complaints } = take({ ...good(), channels: { A1: Float32Array.of(1, Infinity, NaN, -Infinity) } });
    expect(blocks[0]!.channels[0]!.samples).toEqual(Float64Array.of(1, NaN, NaN, NaN));
    expect(complaints).toEqual([
      { code: 'VALUE_NOT_FINITE', where: `${TOPIC} A1`, detail: '3 of 4 values not finite' },
    ]);
  });

  it('takes a rate within 0.5 % of the definition and refuses one beyond', () => {
    expect(take({ ...good(), rate: 502.4 }).blocks).toHaveLength(1);
    expect(codes(take({ ...good(), rate: 502.6 }).complaints)).toEqual(['RATE_WRONG', 'RATE_WRONG']);
    expect(codes(take({ ...good(), rate: 497.4 }).complaints)).toEqual(['RATE_WRONG', 'RATE_WRONG']);
  });

  it('takes times up to 60 s ahead, from 2000 to 2100, and refuses those beyond', () => {
    const at = (start: number, nowMicros: number | null = NOW): string[] =>
      codes(take({ ...good(), start, channels: { A1: [1] } }, TOPIC, nowMicros).complaints);
    expect(at(NOW + 60_000_000)).toEqual([]);
    expect(at(NOW + 60_000_001)).toEqual(['TIME_IN_FUTURE']);
    expect(at(NOW + 60_000_001, null)).toEqual([]);
    expect(at(946_684_800_000_000)).toEqual([]);
    expect(at(946_684_799_999_999)).toEqual(['TIME_OUT_OF_RANGE']);
    expect(at(0)).toEqual(['TIME_OUT_OF_RANGE']);
    expect(at(4_102_444_800_000_000, null)).toEqual([]);
    expect(at(4_102_444_800_000_001, null)).toEqual(['TIME_OUT_OF_RANGE']);
  });

  it.each<[string, unknown, string]>([
    ['no map', [1, 2, 3], 'MESSAGE_SHAPE'],
    ['no start', { rate: 500, channels: {} }, 'MESSAGE_SHAPE'],
    ['a start in text', { ...good(), start: '2026-12-01' }, 'MESSAGE_SHAPE'],
    ['a start beyond 2^53', { ...good(), start: 2n ** 60n }, 'TIME_OUT_OF_RANGE'],
    ['a start that is no whole number', { ...good(), start: 1.5 }, 'MESSAGE_SHAPE'],
    ['a rate of zero', { ...good(), rate: 0 }, 'MESSAGE_SHAPE'],
    ['a rate that is infinite', { ...good(), rate: Infinity }, 'MESSAGE_SHAPE'],
    ['a rate that is not a number', { ...good(), rate: NaN }, 'MESSAGE_SHAPE'],
    ['a negative number of the message', { ...good(), seq: -1 }, 'MESSAGE_SHAPE'],
    ['a scale in text', { ...good(), scale: 'big' }, 'MESSAGE_SHAPE'],
    ['a scale that is infinite', { ...good(), scale: Infinity }, 'MESSAGE_SHAPE'],
    ['channels that are no map', { ...good(), channels: 5 }, 'MESSAGE_SHAPE'],
  ])('refuses a message with %s', (_what, message, code) => {
    const { blocks, complaints } = take(message);
    expect(blocks).toEqual([]);
    expect(codes(complaints)).toEqual([code]);
  });

  it.each<[string, string, RegExp]>([
    ['plain text', 'xx', /^does not begin as a CBOR map$/],
    ['JSON', '{"start":1}', /^does not begin as a CBOR map; JSON belongs on the topic that ends in senml$/],
    ['JSON of another shape', '[{"n":"A1","v":1}]', /JSON belongs on the topic that ends in senml$/],
  ])('calls %s on the topic of samples what it is', (_what, text, words) => {
    const { blocks, complaints } = decodeMessage(directory, TOPIC, Buffer.from(text), { nowMicros: NOW });
    expect(blocks).toEqual([]);
    expect(codes(complaints)).toEqual(['MESSAGE_ENCODING']);
    expect(complaints[0]!.detail).toMatch(words);
  });

  it('refuses 10 000 sensors in one message, and takes 256', () => {
    const many = (count: number): Record<string, unknown> =>
      Object.fromEntries(Array.from({ length: count }, (_, i) => [`X${i}`, [1]]));
    expect(codes(take({ ...good(), channels: many(10_000) }).complaints)).toEqual(['SENSOR_TOO_MANY']);
    const { complaints } = take({ ...good(), channels: many(256) });
    expect(complaints).toHaveLength(65);
    expect(complaints.at(-1)!.detail).toBe('and 192 more complaints');
  });

  it('refuses a channel of more samples than a block may have', () => {
    const over = new Int8Array(BLOCK_LIMITS.samplesPerChannel + 1);
    const { blocks, complaints } = take({
      ...good(),
      start: NOW - 3600e6,
      channels: { A1: over, A2: over.subarray(1) },
    });
    expect(codes(complaints)).toEqual(['MESSAGE_TOO_LARGE']);
    expect(blocks[0]!.channels[0]!.sensor).toBe('A2');
  });

  it('refuses a message larger than a block may be, unread', () => {
    const { complaints } = decodeMessage(directory, TOPIC, new Uint8Array(BLOCK_LIMITS.bytes + 1), { nowMicros: NOW });
    expect(codes(complaints)).toEqual(['MESSAGE_TOO_LARGE']);
  });

  it('names an unknown bridge, an unknown logger, and a topic that is neither', () => {
    expect(codes(take(good(), 'spanbeat/nowhere/L1/samples').complaints)).toEqual(['BRIDGE_UNKNOWN']);
    expect(codes(take(good(), 'spanbeat/specimen/L9/samples').complaints)).toEqual(['LOGGER_UNKNOWN']);
    for (const topic of ['', 'spanbeat', 'spanbeat/specimen/L1', 'spanbeat//L1/samples', 'other/specimen/L1/samples']) {
      expect(codes(take(good(), topic).complaints)).toEqual(['MESSAGE_TOPIC']);
    }
  });

  it('takes a mapped topic with the names of the logger', () => {
    const { blocks, complaints } = take({ ...good(), channels: { ch0: [1], ch1: [2], C1: [3] } }, 'plant/3/blocks');
    expect(blocks[0]!.channels.map(({ sensor }) => sensor)).toEqual(['C1', 'C2']);
    expect(blocks[0]!.logger).toBe('L3');
    expect(codes(complaints)).toEqual(['MESSAGE_SHAPE']);
  });

  it('keeps the one good channel beside 255 unknown ones', () => {
    const channels = Object.fromEntries(Array.from({ length: 255 }, (_, i) => [`X${i}`, [1]]));
    const { blocks, complaints } = take({ ...good(), channels: { ...channels, A1: [1] } });
    expect(blocks).toHaveLength(1);
    expect(new Set(codes(complaints))).toEqual(new Set(['SENSOR_UNKNOWN']));
  });
});

describe('whatever comes, decodeMessage gives sound blocks or complaints with a code', () => {
  const SENML_TOPIC = 'site/7/raw';
  const record = (i: number): Record<string, unknown> => ({ n: 'B1', u: 'm/s2', v: i / 7, t: START / 1e6 + i / 100 });
  const pack = [
    { bn: 'dev:', bt: START / 1e6 },
    ...Array.from({ length: 12 }, (_, i) => ({ ...record(i), t: i / 100 })),
  ];
  const specimens: [string, Uint8Array][] = [
    [TOPIC, encode({ ...good(), scale: { A1: 2 } })],
    [
      TOPIC,
      samplesPayload({
        startMicros: START,
        rateHz: 500,
        sequence: 9,
        channels: new Map([['A1', new Float32Array(40)]]),
      }),
    ],
    [SENML_TOPIC, Buffer.from(JSON.stringify(pack))],
    [
      SENML_TOPIC,
      plainMaps.encode(pack.map((one) => new Map(Object.entries(one).map(([label, value]) => [LABELS[label], value])))),
    ],
    ['spanbeat/specimen/L1/senml', Buffer.from(JSON.stringify([{ n: 'T1', u: 'Cel', v: 21, t: START / 1e6 }]))],
  ];

  it('of the valid messages that are spoilt below gives blocks and nothing else', () => {
    for (const [topic, payload] of specimens) {
      const decoded = decodeMessage(directory, topic, payload, { nowMicros: NOW });
      expect(decoded.complaints).toEqual([]);
      expect(decoded.blocks.length).toBeGreaterThan(0);
      expectSound(topic, payload, decoded);
    }
  });

  it('of valid messages with bytes changed, cut out, doubled, put in, or the end cut off', () => {
    const change = fc.record({
      how: fc.constantFrom('set', 'flip', 'drop', 'double', 'insert', 'cut'),
      at: fc.nat(),
      length: fc.integer({ min: 1, max: 16 }),
      byte: fc.integer({ min: 0, max: 255 }),
    });
    const changes = fc.array(change, { minLength: 1, maxLength: 4 });
    fc.assert(
      fc.property(fc.constantFrom(...specimens), changes, ([topic, payload], all) => {
        let bytes: Uint8Array = Buffer.from(payload);
        for (const { how, at, length, byte } of all) {
          const from = at % (bytes.length + 1);
          const [before, after] = [bytes.subarray(0, from), bytes.subarray(from)];
          const filled = Buffer.alloc(length, byte);
          if (how === 'set') bytes = Buffer.concat([before, filled.subarray(0, after.length), after.subarray(length)]);
          else if (how === 'flip')
            bytes = Buffer.concat([
              before,
              after.subarray(0, 1).map((one) => one ^ (1 << (byte % 8))),
              after.subarray(1),
            ]);
          else if (how === 'drop') bytes = Buffer.concat([before, after.subarray(length)]);
          else if (how === 'double') bytes = Buffer.concat([before, after.subarray(0, length), after]);
          else if (how === 'insert') bytes = Buffer.concat([before, filled, after]);
          else bytes = before;
        }
        expectSound(topic, bytes, decodeMessage(directory, topic, bytes, { nowMicros: NOW }));
      }),
      { numRuns: 20_000, seed: 20_261_201 },
    );
  });

  it('of random bytes on any topic', () => {
    const topics = [TOPIC, 'spanbeat/specimen/L1/senml', SENML_TOPIC, 'plant/x/blocks', '\u0000', '$SYS/x'];
    fc.assert(
      fc.property(fc.constantFrom(...topics), fc.uint8Array({ maxLength: 120 }), (topic, bytes) => {
        expectSound(topic, bytes, decodeMessage(directory, topic, bytes, { nowMicros: NOW }));
      }),
      { numRuns: 5000, seed: 20_261_202 },
    );
  });

  it('of any value in any field, as CBOR and as JSON', () => {
    const field = fc.constantFrom('start', 'rate', 'seq', 'scale', 'channels', 'A1');
    const label = fc.constantFrom('n', 'u', 'v', 't', 'bn', 'bt', 'bu', 'bv', 'bver', 'vs', 'vd', 'vb', 's', 'ut');
    const value = fc.oneof(
      fc.anything({ withBigInt: true, maxDepth: 3 }).filter(isEncodable),
      fc.constantFrom(Infinity, -Infinity, NaN, -0, 2 ** 53, 1e308, 5e-324, '', '\u0000', '\ud800'),
    );
    fc.assert(
      fc.property(field, label, value, (name, key, given) => {
        const message = name === 'A1' ? { ...good(), channels: { A1: given, A2: [1] } } : { ...good(), [name]: given };
        const bytes = encode(message);
        expectSound(TOPIC, bytes, decodeMessage(directory, TOPIC, bytes, { nowMicros: NOW }));
        const text = Buffer.from(JSON.stringify([record(0), { ...record(1), [key]: given }], plain));
        expectSound(SENML_TOPIC, text, decodeMessage(directory, SENML_TOPIC, text, { nowMicros: NOW }));
      }),
      { numRuns: 4000, seed: 20_261_203 },
    );
  });
});

/** Whole numbers as labels, without a tag on the map. */
const options = { mapsAsObjects: false, useTag259ForMaps: false };
const plainMaps = new Encoder(options);
/** RFC 8428, table 4. */
const LABELS: Record<string, number> = { bn: -2, bt: -3, n: 0, u: 1, v: 2, t: 6 };

function isEncodable(value: unknown): boolean {
  try {
    encode(value);
    JSON.stringify(value, plain);
    return true;
  } catch {
    return false; // what no logger could send is no case
  }
}

const plain = (_key: string, value: unknown): unknown => (typeof value === 'bigint' ? String(value) : value);

/** What the pipeline may rely on, and the person who reads a complaint. */
function expectSound(topic: string, payload: Uint8Array, { blocks, complaints }: Decoded): void {
  for (const { code, where, detail } of complaints) {
    expect(Object.hasOwn(ERRORS, code)).toBe(true);
    expect(where?.startsWith(topic.slice(0, 200))).toBe(true);
    expect(detail.length).toBeGreaterThan(0);
    expect(detail.length).toBeLessThan(500);
  }
  expect(complaints.length).toBeLessThanOrEqual(65);
  for (const { bridge, logger, sequence, startMicros, rateHz, channels } of blocks) {
    expect(bridge).toBe(BRIDGE.id);
    expect(sequence === null || (Number.isSafeInteger(sequence) && sequence >= 0)).toBe(true);
    expect(channels.length).toBeGreaterThan(0);
    expect(new Set(channels.map(({ sensor }) => sensor)).size).toBe(channels.length);
    const [{ samples: first } = { samples: new Float64Array(0) }] = channels;
    expect(first.length).toBeGreaterThan(0);
    expect(first.length).toBeLessThanOrEqual(BLOCK_LIMITS.samplesPerChannel);
    expect(Number.isSafeInteger(startMicros) && startMicros >= EARLIEST_MICROS).toBe(true);
    expect(sampleMicros(startMicros, first.length - 1, rateHz)).toBeLessThanOrEqual(NOW + 60_000_000);
    for (const { sensor, samples } of channels) {
      const defined = BRIDGE.sensors.find(({ id }) => id === sensor);
      expect(defined?.logger).toBe(logger);
      expect(Math.abs(rateHz / defined!.rateHz - 1)).toBeLessThanOrEqual(0.005 + 1e-12);
      expect(samples.length).toBe(first.length);
      expect(samples.every((x) => Number.isFinite(x) || Number.isNaN(x))).toBe(true);
      expect(samples.buffer).not.toBe(payload.buffer);
    }
  }
  // Nothing at all is said only of what holds nothing at all.
  if (blocks.length === 0 && complaints.length === 0) expect(isEmpty(topic, payload)).toBe(true);
}

function isEmpty(topic: string, payload: Uint8Array): boolean {
  const senml = topic === 'site/7/raw' || topic.endsWith('/senml');
  if (!senml) {
    const read = decodeSamples(payload);
    return read.ok && read.value.channels.every(({ samples }) => samples.length === 0);
  }
  const read = decodeSenml(payload, NOW);
  return read.ok && read.value.records.length === 0 && read.value.leftOut.length === 0;
}

describe('buildDirectory', () => {
  it('subscribes to the contract and to each mapped topic', () => {
    expect(directory.filters()).toEqual([
      'spanbeat/+/+/samples',
      'spanbeat/+/+/senml',
      'spanbeat/+/+/status',
      'site/7/raw',
      'plant/+/blocks',
    ]);
  });

  it('matches wildcards as MQTT 5 section 4.7 does', () => {
    const of = (topic: string): typeof directory =>
      buildDirectory([{ ...BRIDGE, loggers: [{ id: 'L1', topic }] }]).directory;
    expect(of('a/#').mapped('a')).toBeDefined();
    expect(of('a/#').mapped('a/b/c')).toBeDefined();
    expect(of('a/+').mapped('a')).toBeUndefined();
    expect(of('a/+').mapped('a/')).toBeDefined();
    expect(of('a/+').mapped('a/b/c')).toBeUndefined();
    expect(of('+/b').mapped('$SYS/b')).toBeUndefined();
    expect(of('#').mapped('$SYS/b')).toBeUndefined();
    expect(of('#').mapped('x')).toBeDefined();
  });

  it('complains of a topic that is mapped twice and of one that is no filter, and keeps the others', () => {
    const loggers = [
      { id: 'L1', topic: 'one' },
      { id: 'L2', topic: 'one' },
      { id: 'L3', topic: 'a/b#' },
    ];
    const { directory: built, complaints } = buildDirectory([{ ...BRIDGE, loggers }]);
    expect(codes(complaints)).toEqual(['DEFINITION_DUPLICATE_ID', 'DEFINITION_INVALID']);
    expect(built.mapped('one')?.logger).toBe('L1');
  });
});
