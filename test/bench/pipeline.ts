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
const BLOCK_SECONDS = 0.5;
const SECONDS = 120;
const ROUNDS = 12;

/** The whole pipeline on one core against the bare filters and spectra of it in SciPy, the same blocks, in one run. */
export function benchPipeline(): Figure[] {
  const bridge = sixteenChannels();
  const blocks = streamOf(bridge);
  const samples = blocks.reduce((sum, { channels }) => sum + channels.length * channels[0]!.samples.length, 0);
  const ours = bestRate(() => runOnce(bridge, blocks), samples);
  const figures: Figure[] = [
    {
      what: `pipeline, ${CHANNELS} channels of ${RATE_HZ} Hz, blocks of ${BLOCK_SECONDS} s, 3 trains`,
      value: ours / 1e6,
      unit: 'M samples/s',
      aim: '>= 5',
    },
  ];
  const theirs = scipyRate();
  if (theirs === null) return [...figures, { what: 'SciPy is not on this machine', value: NaN, unit: '' }];
  return [
    ...figures,
    { what: 'SciPy: sosfilt of both filters and Welch, same blocks', value: theirs / 1e6, unit: 'M samples/s' },
    { what: 'pipeline over SciPy', value: ours / theirs, unit: 'times', aim: '>= 3' },
  ];
}

function sixteenChannels(): BridgeDefinition {
  const sensors = Array.from({ length: CHANNELS }, (_, i) => deckSensor(`A${i + 1}`, 2 + i, { rateHz: RATE_HZ }));
  return plainBridge({ sensors });
}

function streamOf(bridge: BridgeDefinition): SampleBlock[] {
  const fromMicros = 1_780_000_000_000_000;
  const { channels } = simulate({
    definition: bridge,
    parameters: bridgeParameters(bridge),
    seed: 1,
    fromMicros,
    toMicros: fromMicros + SECONDS * 1e6,
    events: [20, 55, 90].map((second, i) => ({
      kind: 'passage',
      train: createTrain(i === 1 ? 'intercity' : 'regional multiple unit', i),
      onMicros: fromMicros + second * 1e6,
      speedMs: 40,
      direction: 'rising',
    })),
  });
  return [...blocksOf(bridge.id, channels, BLOCK_SECONDS)];
}

function runOnce(bridge: BridgeDefinition, blocks: readonly SampleBlock[]): void {
  const state = createPipeline(bridge, 1);
  let passages = 0;
  for (const block of blocks) passages += step(state, block).passages.length;
  if (passages < 2) throw new Error(`${passages} passages in the stream of the benchmark`);
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
const SCRIPT = `
import json, time, numpy as np
from scipy import signal
channels, rate, block, seconds, rounds = ${CHANNELS}, ${RATE_HZ}, ${Math.round(BLOCK_SECONDS * RATE_HZ)}, ${SECONDS}, ${ROUNDS}
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

function scipyRate(): number | null {
  const run = spawnSync('/usr/bin/python3', ['-c', SCRIPT], { encoding: 'utf8' });
  return run.status === 0 ? (JSON.parse(run.stdout) as number) : null;
}
