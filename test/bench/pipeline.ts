import { spawnSync } from 'node:child_process';
import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { createPipeline, step } from '#core/passage/pipeline.ts';
import { bridgeParameters } from '../../simulator/parameters.ts';
import { simulate } from '../../simulator/scene.ts';
import { createTrain } from '../../simulator/train.ts';
import { deckSensor, plainBridge } from '../support/bridges.ts';
import { blocksOf } from '../support/scenes.ts';
import type { Figure } from './figure.ts';

const CHANNELS = 16;
const RATE_HZ = 500;
/** As loggers send them: a long block, and a short one for an alarm at once. */
const BLOCKS_SECONDS = [0.5, 0.1];
const SECONDS = 120;
const ROUNDS = 12;

/**
 * The whole pipeline on one core against the bare filters and spectra of it in SciPy, the same blocks, in one run: on
 * a stream without trains, where both do about the same work, and with a train each 40 s, which SciPy does not measure.
 */
export function benchPipeline(): Figure[] {
  return BLOCKS_SECONDS.flatMap((seconds) => {
    const quiet = rateOf([], seconds);
    const busy = rateOf([20, 55, 90], seconds);
    const theirs = scipyRate(seconds);
    const what = `${CHANNELS} channels of ${RATE_HZ} Hz, blocks of ${seconds} s`;
    const unit = 'M samples/s';
    const ours: Figure[] = [
      { what: `pipeline, ${what}, no train`, value: quiet / 1e6, unit, aim: '>= 5' },
      { what: `pipeline, ${what}, a train each 40 s`, value: busy / 1e6, unit, aim: '>= 5' },
    ];
    if (theirs === null) return [...ours, { what: 'SciPy is not on this machine', value: NaN, unit: '' }];
    return [
      ...ours,
      { what: 'SciPy: sosfilt of both filters and Welch, same blocks', value: theirs / 1e6, unit },
      { what: 'pipeline over SciPy, no train', value: quiet / theirs, unit: 'times', aim: '>= 3' },
      { what: 'pipeline over SciPy, a train each 40 s', value: busy / theirs, unit: 'times', aim: '>= 3' },
    ];
  });
}

function rateOf(trainSeconds: readonly number[], blockSeconds: number): number {
  const bridge = sixteenChannels();
  const blocks = streamOf(bridge, trainSeconds, blockSeconds);
  const samples = blocks.reduce((sum, { channels }) => sum + channels.length * channels[0]!.samples.length, 0);
  return bestRate(() => runOnce(bridge, blocks, trainSeconds.length), samples);
}

function sixteenChannels(): BridgeDefinition {
  const sensors = Array.from({ length: CHANNELS }, (_, i) => deckSensor(`A${i + 1}`, 2 + i, { rateHz: RATE_HZ }));
  return plainBridge({ sensors });
}

function streamOf(bridge: BridgeDefinition, trainSeconds: readonly number[], blockSeconds: number): SampleBlock[] {
  const fromMicros = 1_780_000_000_000_000;
  const { channels } = simulate({
    definition: bridge,
    parameters: bridgeParameters(bridge),
    seed: 1,
    fromMicros,
    toMicros: fromMicros + SECONDS * 1e6,
    events: trainSeconds.map((second, i) => ({
      kind: 'passage',
      train: createTrain(i === 1 ? 'intercity' : 'regional multiple unit', i),
      onMicros: fromMicros + second * 1e6,
      speedMs: 40,
      direction: 'rising',
    })),
  });
  return [...blocksOf(bridge.id, channels, blockSeconds)];
}

function runOnce(bridge: BridgeDefinition, blocks: readonly SampleBlock[], trains: number): void {
  const state = createPipeline(bridge, 1);
  let passages = 0;
  for (const block of blocks) passages += step(state, block).passages.length;
  // the free part of the last may not have ended
  if (passages > trains || passages < trains - 1) throw new Error(`${passages} passages of ${trains} trains`);
}

/** Samples a second of the best round: what the code can do when nobody disturbs it. */
function bestRate(round: () => void, samples: number): number {
  round();
  let best = 0;
  for (let i = 0; i < ROUNDS; i++) {
    const started = performance.now();
    round();
    best = Math.max(best, samples / ((performance.now() - started) / 1000));
  }
  return best;
}

/** Offset removed, band low-pass, noise high-pass and its power, largest magnitude, and a Welch spectrum a minute. */
const scriptOf = (blockSeconds: number): string => `
import json, time, numpy as np
from scipy import signal
channels, rate, block, seconds, rounds = ${CHANNELS}, ${RATE_HZ}, ${Math.round(blockSeconds * RATE_HZ)}, ${SECONDS}, ${ROUNDS}
x = np.random.default_rng(1).standard_normal((channels, seconds * rate))
low = signal.butter(4, 45, fs=rate, output='sos')
high = signal.butter(4, 30, 'high', fs=rate, output='sos')
def once():
    zl = np.zeros((low.shape[0], channels, 2)); zh = np.zeros((high.shape[0], channels, 2))
    offset = np.zeros((channels, 1)); minute = []
    for at in range(0, x.shape[1], block):
        b = x[:, at:at + block]
        offset += 0.1 * (b.mean(axis=1, keepdims=True) - offset)
        c = b - offset
        y, zl = signal.sosfilt(low, c, axis=1, zi=zl)
        n, zh = signal.sosfilt(high, c, axis=1, zi=zh)
        np.abs(y).max(axis=1); (n * n).sum(axis=1)
        minute.append(c)
        if len(minute) * block >= 60 * rate:
            signal.welch(np.concatenate(minute, axis=1), rate, nperseg=2048); minute = []
once(); best = 0
for _ in range(rounds):
    t = time.perf_counter(); once(); best = max(best, x.size / (time.perf_counter() - t))
print(json.dumps(best))
`;

function scipyRate(blockSeconds: number): number | null {
  const run = spawnSync('/usr/bin/python3', ['-c', scriptOf(blockSeconds)], { encoding: 'utf8' });
  return run.status === 0 ? (JSON.parse(run.stdout) as number) : null;
}
