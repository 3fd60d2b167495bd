import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { samplesPayload } from '../../simulator/payload.ts';
import { simulate } from '../../simulator/scene.ts';
import { createTrain } from '../../simulator/train.ts';
import { deckSensor, gauge, plainBridge } from '../support/bridges.ts';

export const RATE_HZ = 500;
/** Sixteen channels of 500 Hz: fourteen accelerometers on the deck and a rail gauge at each bearing. */
const DECK_CHANNELS = 14;
export const CHANNELS = DECK_CHANNELS + 2;
/** One train in so many seconds: its passage and the free vibration after it are over before the next. */
export const LOOP_SECONDS = 25;
const TRAIN_AFTER_SECONDS = 6;

/** A bridge with two limits, so low that its trains pass all levels of both. */
export function benchBridge(): BridgeDefinition {
  const deck = Array.from({ length: DECK_CHANNELS }, (_, i) => deckSensor(`A${i + 1}`, 3 + i, { rateHz: RATE_HZ }));
  const [limit] = plainBridge().limits;
  return plainBridge({
    sensors: [...deck, gauge('S1', 0), gauge('S2', 20)],
    limits: [
      { ...limit!, id: 'low', levels: { AL: 0.15, IL: 0.25, IAL: 0.4 } },
      { ...limit!, id: 'high', levels: { AL: 0.2, IL: 0.3, IAL: 0.5 } },
    ],
  });
}

/** A stretch of samples that can be sent over and over. */
export interface Loop {
  /** Payload of the `index`th block of `count` samples. */
  payload(index: number, count: number, startMicros: number): Buffer;
}

/** Some seconds of one bridge, simulated once, with one train in it or with none. */
export function benchLoop(train: boolean, seed: number, seconds = LOOP_SECONDS): Loop {
  const definition = benchBridge();
  const fromMicros = 1_780_000_000_000_000;
  const { channels } = simulate({
    definition,
    parameters: bridgeParameters(definition),
    seed,
    fromMicros,
    toMicros: fromMicros + seconds * 1e6,
    events: train
      ? [
          {
            kind: 'passage',
            train: createTrain('regional multiple unit', seed),
            onMicros: fromMicros + TRAIN_AFTER_SECONDS * 1e6,
            speedMs: 38 + (seed % 7),
            direction: 'rising',
          },
        ]
      : [],
  });
  const length = Math.round(seconds * RATE_HZ);
  const sent = channels.map(({ sensor, samples }) => ({ sensor, samples: Float32Array.from(samples) }));
  return {
    payload(index, count, startMicros) {
      const at = (index * count) % length;
      if (length % count !== 0) throw new Error(`${count} samples do not divide a loop of ${length}`);
      const parts = new Map(sent.map(({ sensor, samples }) => [sensor, samples.subarray(at, at + count)]));
      return samplesPayload({ startMicros, rateHz: RATE_HZ, sequence: index, channels: parts });
    },
  };
}
