import { createServer, type Server } from 'node:net';
import { readFileSync } from 'node:fs';
import { Aedes, type AedesPublishPacket } from 'aedes';
import fc from 'fast-check';
import { afterEach, describe, expect, it } from 'vitest';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import { decodeSamples } from '../../server/ingest/samples-payload.ts';
import { decodeSenml } from '../../server/ingest/senml-payload.ts';
import { decodeDefinition } from '../../server/definition.ts';
import { DEMONSTRATION_FILES, startDemonstration } from '../../simulator/demonstration.ts';
import { createLoggers, wireSamples } from '../../simulator/logger.ts';
import { samplesPayload, senmlPayload } from '../../simulator/payload.ts';
import { connectLogger } from '../../simulator/publisher.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

interface Broker {
  url: string;
  packets: { topic: string; payload: Buffer; retain: boolean }[];
  /** Withholds acknowledgements until called. */
  hold(): () => void;
  close(): Promise<void>;
}

const open: Broker[] = [];
afterEach(async () => {
  for (const broker of open.splice(0)) await broker.close();
});

async function startBroker(): Promise<Broker> {
  const packets: Broker['packets'] = [];
  let held: (() => void)[] | null = null;
  const aedes = await Aedes.createBroker({
    authorizePublish: (_client, packet, done) => {
      if (held === null || packet.topic.endsWith('status')) done(null);
      else held.push(() => done(null));
    },
  });
  aedes.on('publish', (packet: AedesPublishPacket) => {
    if (packet.topic.startsWith('$SYS')) return;
    packets.push({ topic: packet.topic, payload: Buffer.from(packet.payload), retain: packet.retain });
  });
  const server: Server = createServer(aedes.handle);
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
  const address = server.address();
  if (address === null || typeof address === 'string') throw new Error('no port');
  const broker: Broker = {
    url: `mqtt://127.0.0.1:${address.port}`,
    packets,
    hold() {
      held = [];
      return () => {
        const waiting = held ?? [];
        held = null;
        for (const release of waiting) release();
      };
    },
    close: async () => {
      await new Promise<void>((resolve) => aedes.close(() => resolve()));
      await new Promise<void>((resolve) => server.close(() => resolve()));
    },
  };
  open.push(broker);
  return broker;
}

function block(number: number, over: Partial<SampleBlock> = {}): SampleBlock {
  return {
    bridge: 'ottermere',
    logger: 'north',
    sequence: number,
    startMicros: DAWN + number * 200_000,
    rateHz: 500,
    channels: [{ sensor: 'A1', samples: Float64Array.of(number, 0.5, -0.25) }],
    ...over,
  };
}

describe('a payload of samples', () => {
  it('is read by the server to the same numbers', () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 0, max: 4e15 }),
        fc.oneof(fc.integer({ min: 1, max: 20_000 }), fc.double({ min: 0.01, max: 20_000, noNaN: true })),
        fc.option(fc.nat(2 ** 31)),
        fc.oneof(fc.float32Array(), fc.int16Array(), fc.int32Array()),
        (startMicros, rateHz, sequence, samples) => {
          const payload = samplesPayload({ startMicros, rateHz, sequence, channels: new Map([['A1', samples]]) });
          const decoded = decodeSamples(payload);
          expect(decoded).toEqual({
            ok: true,
            value: {
              startMicros,
              rateHz,
              sequence,
              channels: [{ name: 'A1', samples: Float64Array.from(samples) }],
              complaints: [],
            },
          });
        },
      ),
      { numRuns: 300, seed: 41320 },
    );
  });

  it('of readings is SenML that the server reads', () => {
    const payload = senmlPayload([{ name: 'T1', unit: 'Cel', value: -3.25, micros: DAWN + 17 }]);
    expect(decodeSenml(payload, null)).toMatchObject({
      ok: true,
      value: { records: [{ name: 'T1', micros: DAWN + 17, value: -3.25, unit: 'Cel' }], leftOut: [] },
    });
  });

  it('holds whole counts where a scale makes values of them, wider where they need it', () => {
    expect(wireSamples({ scale: 0.1 }, Float64Array.of(1.4, -2.6))).toEqual(Int16Array.of(1, -3));
    expect(wireSamples({ scale: 0.1 }, Float64Array.of(40_000.2))).toEqual(Int32Array.of(40_000));
    expect(wireSamples({}, Float64Array.of(0.1))).toEqual(Float32Array.of(0.1));
  });
});

describe('the loggers of a bridge', () => {
  it('send one block for each rate, numbered, in order of time, in numbers that survive the wire', () => {
    const loggers = createLoggers(aDefinition());
    const channels = [
      { sensor: 'T1', rateHz: 1, startMicros: DAWN, samples: Float64Array.of(0.1), clean: new Float64Array(0) },
      { sensor: 'A1', rateHz: 500, startMicros: DAWN, samples: Float64Array.of(0.1, 0.2), clean: new Float64Array(0) },
      { sensor: 'A2', rateHz: 500, startMicros: DAWN, samples: Float64Array.of(0.3, 0.4), clean: new Float64Array(0) },
    ];
    const blocks = [...loggers.gather(channels), ...loggers.gather(channels)];
    expect(blocks.map(({ sequence }) => sequence)).toEqual([0, 1, 2, 3]);
    expect(blocks.map(({ channels: sent }) => sent.map(({ sensor }) => sensor))).toEqual([
      ['T1'],
      ['A1', 'A2'],
      ['T1'],
      ['A1', 'A2'],
    ]);
    expect(blocks[1]?.channels[0]?.samples).toEqual(Float64Array.of(Math.fround(0.1), Math.fround(0.2)));
  });
});

describe('a publishing logger', () => {
  it('says online, sends samples as CBOR and temperatures as SenML, and says offline, retained', async () => {
    const broker = await startBroker();
    const logger = await connectLogger({
      brokerUrl: broker.url,
      root: 'site',
      definition: aDefinition(),
      logger: 'north',
    });
    await logger.publish(block(1));
    await logger.publish(block(2, { rateHz: 1, channels: [{ sensor: 'T1', samples: Float64Array.of(7.5) }] }));
    await logger.stop();
    await logger.stop();
    const [online, samples, senml, offline] = broker.packets;
    expect(online).toMatchObject({
      topic: 'site/ottermere/north/status',
      retain: true,
      payload: Buffer.from('online'),
    });
    expect(samples?.topic).toBe('site/ottermere/north/samples');
    expect(decodeSamples(samples!.payload)).toMatchObject({ ok: true, value: { sequence: 1, rateHz: 500 } });
    expect(senml?.topic).toBe('site/ottermere/north/senml');
    expect(decodeSenml(senml!.payload, null)).toMatchObject({
      ok: true,
      value: { records: [{ name: 'T1', value: 7.5 }] },
    });
    expect(offline).toMatchObject({
      topic: 'site/ottermere/north/status',
      retain: true,
      payload: Buffer.from('offline'),
    });
    expect(broker.packets).toHaveLength(4);
  });

  it('keeps to the topic and the names that the definition maps', async () => {
    const broker = await startBroker();
    const definition: BridgeDefinition = {
      ...aDefinition(),
      loggers: [{ id: 'north', topic: 'plant/7/raw', payload: 'samples', channels: { 'CH 01': 'A1' } }],
    };
    const logger = await connectLogger({ brokerUrl: broker.url, root: 'site', definition, logger: 'north' });
    await logger.publish(block(1));
    await logger.stop();
    const sent = broker.packets.find(({ topic }) => topic === 'plant/7/raw');
    expect(decodeSamples(sent!.payload)).toMatchObject({ ok: true, value: { channels: [{ name: 'CH 01' }] } });
  });

  it('waits when 32 messages are not acknowledged, and goes on when they are', async () => {
    const broker = await startBroker();
    const logger = await connectLogger({
      brokerUrl: broker.url,
      root: 'site',
      definition: aDefinition(),
      logger: 'north',
    });
    const release = broker.hold();
    for (let number = 0; number < 32; number++) await logger.publish(block(number));
    let gone = false;
    const next = logger.publish(block(32)).then(() => (gone = true));
    await new Promise((resolve) => setTimeout(resolve, 100));
    expect(gone).toBe(false);
    release();
    await next;
    await logger.stop();
    const numbers = broker.packets
      .filter(({ topic }) => topic.endsWith('samples'))
      .map(({ payload }) => decodeSamples(payload))
      .map((decoded) => (decoded.ok ? decoded.value.sequence : null));
    expect(numbers).toEqual(Array.from({ length: 33 }, (_, number) => number));
  });

  it('fails where no broker answers', async () => {
    const connecting = connectLogger({
      brokerUrl: 'mqtt://127.0.0.1:1',
      root: 'x',
      definition: aDefinition(),
      logger: 'north',
    });
    await expect(connecting).rejects.toThrow();
  });
});

describe('the demonstration', () => {
  const definitions = DEMONSTRATION_FILES.map((url) => {
    const reading = decodeDefinition(readFileSync(url, 'utf8'), url.pathname);
    if (!reading.ok) throw new Error(JSON.stringify(reading.complaints));
    return reading.value.definition;
  });

  it('streams all bridges without gap or doubling, keeps pace with its clock, and stops', async () => {
    const broker = await startBroker();
    let now = DAWN;
    const demonstration = await startDemonstration({
      brokerUrl: broker.url,
      root: 'spanbeat',
      clock: () => now,
      seed: 1,
      definitions,
    });
    // a clock of twenty times real time
    for (let turn = 0; turn < 100; turn++) {
      now += 200_000;
      await new Promise((resolve) => setTimeout(resolve, 10));
    }
    const streamed = (): number =>
      broker.packets.filter(({ topic }) => topic === 'spanbeat/ottermere/OT-1/samples').length;
    for (let wait = 0; wait < 500 && streamed() < 200; wait++) await new Promise((resolve) => setTimeout(resolve, 10));
    await demonstration.stop();
    await demonstration.stop();
    for (const { id, loggers } of definitions) {
      const topic = `spanbeat/${id}/${loggers[0]!.id}/samples`;
      const messages = broker.packets
        .filter((packet) => packet.topic === topic)
        .flatMap(({ payload }) => {
          const decoded = decodeSamples(payload);
          return decoded.ok ? [decoded.value] : [];
        });
      for (const rateHz of new Set(messages.map((message) => message.rateHz))) {
        const run = messages.filter((message) => message.rateHz === rateHz);
        expect(run[0]?.startMicros).toBe(DAWN);
        for (const [index, message] of run.entries()) {
          const before = run[index - 1];
          if (before === undefined) continue;
          const end = before.startMicros + (before.channels[0]!.samples.length * MICROS_PER_SECOND) / rateHz;
          expect(Math.abs(message.startMicros - end)).toBeLessThanOrEqual(1);
        }
        const last = run.at(-1)!;
        const covered = last.startMicros + (last.channels[0]!.samples.length * MICROS_PER_SECOND) / rateHz - DAWN;
        expect(covered).toBeGreaterThanOrEqual(19 * MICROS_PER_SECOND);
        expect(covered).toBeLessThanOrEqual(20.2 * MICROS_PER_SECOND);
      }
      const status = broker.packets.filter((packet) => packet.topic.endsWith(`${id}/${loggers[0]!.id}/status`));
      expect(status.map(({ payload }) => payload.toString())).toEqual(['online', 'offline']);
    }
  });
});
