import { beforeAll, describe, expect, it } from 'vitest';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { PipelineOutput } from '#core/contract/pipeline.ts';
import { measureWhole, recompute } from '#core/passage/pipeline.ts';
import type { SceneEvent } from '../../../simulator/nuisance.ts';
import { bridgeParameters } from '../../../simulator/parameters.ts';
import type { PassageEvent } from '../../../simulator/passage.ts';
import { simulate } from '../../../simulator/scene.ts';
import { createTrain, type TrainType } from '../../../simulator/train.ts';
import type { PassageTruth } from '../../../simulator/truth.ts';
import { deckSensor, gauge, plainBridge } from '../../support/bridges.ts';
import { blocksOf, onlyPassage, runPipeline } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const at = (second: number): number => FROM + second * 1e6;

const WITH_GAUGES = plainBridge({
  sensors: [
    ...['A1', 'A2', 'A3', 'A4'].map((id, i) => deckSensor(id, 4 + 4 * i, { acrossM: i % 2 === 0 ? -1.2 : 1.2 })),
    gauge('S1', 0),
    gauge('S2', 20),
    { id: 'T1', quantity: 'temperature', logger: 'L1', mount: 'girder', alongM: 10, unit: 'Cel', rateHz: 0.2 },
  ],
});
const BARE = plainBridge({ sensors: WITH_GAUGES.sensors.filter(({ countsAxles }) => countsAxles !== true) });

function passage(second: number, type: TrainType, speedMs: number, change: Partial<PassageEvent> = {}): PassageEvent {
  return {
    kind: 'passage',
    train: createTrain(type, 7),
    onMicros: at(second),
    speedMs,
    direction: 'rising',
    ...change,
  };
}

function scene(
  definition: BridgeDefinition,
  seconds: number,
  ...events: SceneEvent[]
): { output: PipelineOutput; truths: PassageTruth[] } {
  const { channels, truths } = simulate({
    definition,
    parameters: bridgeParameters(definition),
    seed: 42,
    fromMicros: FROM,
    toMicros: at(seconds),
    events,
  });
  return { output: runPipeline(definition, blocksOf(definition.id, channels)), truths };
}

describe('a train in noise, with axle sensors', () => {
  let output: PipelineOutput;
  let truth: PassageTruth;
  beforeAll(() => {
    const made = scene(WITH_GAUGES, 60, passage(20, 'intercity', 38));
    output = made.output;
    truth = made.truths[0]!;
  });

  it('is one passage, entered and left', () => {
    expect(output.progress.map(({ kind }) => kind)).toEqual(['entered', 'left']);
    const record = onlyPassage(output.passages);
    expect(record.quality).toBe('good');
    expect(record.phases.foundBy).toBe('axle sensors');
    expect(Math.abs(record.phases.onMicros - truth.onMicros)).toBeLessThan(50_000);
    expect(Math.abs(record.phases.offMicros - truth.offMicros)).toBeLessThan(50_000);
    expect(record.axleCount.value).toBe(32);
    expect(Math.abs(record.speedMs.value! / truth.speedMs - 1)).toBeLessThan(0.005);
  });

  it('has a peak near the true one, of the channel that truly shook most', () => {
    const record = onlyPassage(output.passages);
    const most = truth.peaks.reduce((a, b) => (b.peakMs2 > a.peakMs2 ? b : a));
    // The truth is not band-limited and has no rolling noise: 10 % for what the 45 Hz low-pass takes off or noise adds.
    expect(Math.abs(record.peak.measured.value! / most.peakMs2 - 1)).toBeLessThan(0.1);
  });

  it('carries the temperature of the steel from before the train', () => {
    expect(Math.abs(onlyPassage(output.passages).temperatureC.value! - truth.steelC)).toBeLessThan(0.5);
  });

  it('shows axles live, with the speed as soon as the second gauge has seen the train', () => {
    expect(output.axles.filter(({ sensor }) => sensor === 'S1')).toHaveLength(32);
    expect(output.axles.filter(({ sensor }) => sensor === 'S2')).toHaveLength(32);
    const late = output.axles.filter(({ sensor, speedMs }) => sensor === 'S2' && speedMs !== null);
    expect(late).toHaveLength(32);
    for (const { speedMs } of late) expect(Math.abs(speedMs! / truth.speedMs - 1)).toBeLessThan(0.03);
  });

  it('can be computed again to the same bits from its wave form', () => {
    const window = output.passages[0]!;
    const again = recompute(WITH_GAUGES, 1, window.passage, window.channels);
    expect(JSON.stringify(again)).toBe(JSON.stringify(window.passage));
  });
});

describe('a train in noise, accelerometers alone', () => {
  it('has phases, speed and direction from wheel-rail noise, and says that axles cannot be counted', () => {
    const { output, truths } = scene(BARE, 60, passage(20, 'intercity', 38, { direction: 'falling' }));
    const record = onlyPassage(output.passages);
    const truth = truths[0]!;
    expect(record.phases.foundBy).toBe('wheel-rail noise');
    expect(Math.abs(record.phases.onMicros - truth.onMicros)).toBeLessThan(100_000);
    expect(Math.abs(record.phases.offMicros - truth.offMicros)).toBeLessThan(100_000);
    expect(record.axleCount).toEqual({ value: null, reason: 'the bridge has no axle sensor' });
    expect(record.direction).toBe('falling');
    expect(record.speedMs).toMatchObject({ quality: 'usable' });
    const off = Math.abs(record.speedMs.value! - truth.speedMs);
    expect(off).toBeLessThan(4 * (record.speedMs.value === null ? 0 : record.speedMs.standardError!));
  });
});

describe('what is no train', () => {
  const blow: SceneEvent = { kind: 'blow', micros: at(20), alongM: 9, acrossM: 0.5, peakKn: 15, lengthS: 0.006 };

  it('a hammer blow is no passage', () => {
    for (const definition of [WITH_GAUGES, BARE]) {
      const { output } = scene(definition, 60, blow, { ...blow, micros: at(20.7) }, { ...blow, micros: at(35) });
      expect(output.passages).toHaveLength(0);
    }
  });

  it('wind is no passage', () => {
    for (const definition of [WITH_GAUGES, BARE]) {
      const { output } = scene(definition, 90, { kind: 'wind', fromMicros: at(15), toMicros: at(80), rmsMs2: 0.08 });
      expect(output.passages).toHaveLength(0);
    }
  });

  it('a walker is no passage', () => {
    const walker: SceneEvent = {
      kind: 'walker',
      fromMicros: at(20),
      fromM: 0,
      toM: 20,
      speedMs: 1.5,
      stepsPerS: 1.9,
      massKg: 85,
    };
    expect(scene(BARE, 60, walker).output.passages).toHaveLength(0);
  });

  it('spikes of one loose cable are no passage', () => {
    const fault: SceneEvent = {
      kind: 'fault',
      sensor: 'A2',
      fromMicros: at(15),
      toMicros: at(50),
      what: 'spikes',
      size: 5,
    };
    const { passages } = scene(BARE, 60, fault).output;
    expect(passages.filter(({ passage: { phases } }) => phases.foundBy !== 'live level')).toEqual([]);
    // the record of the level that they passed rests on the other channels
    for (const { passage: record } of passages) {
      expect(record.peak.severity).toBeNull();
      expect(record.peak.sensor).not.toBe('A2');
    }
  });
});

describe('a sensor that is not to be trusted', () => {
  const fault = (what: 'flat' | 'spikes', size: number): SceneEvent => ({
    kind: 'fault',
    sensor: 'A2',
    fromMicros: FROM,
    toMicros: at(60),
    what,
    size,
  });

  it('is flagged, and the peak is taken from the others', () => {
    const { output } = scene(WITH_GAUGES, 60, passage(20, 'regional multiple unit', 33), fault('spikes', 3));
    const record = onlyPassage(output.passages);
    expect(record.channels.find(({ sensor }) => sensor === 'A2')!.flags).toContain('spike');
    expect(record.peak.sensor).not.toBe('A2');
    expect(record.notes.join()).toContain('A2: spike');
  });

  it('does not stop a passage when it is dead', () => {
    const { output } = scene(WITH_GAUGES, 60, passage(20, 'light engine', 30), fault('flat', 0.1));
    const record = onlyPassage(output.passages);
    expect(record.channels.find(({ sensor }) => sensor === 'A2')!.flags).toContain('flat');
    expect(record.axleCount.value).toBe(4);
  });

  it('makes the peak poor when no deck channel is left', () => {
    const events = ['A1', 'A2', 'A3', 'A4'].map((sensor) => ({ ...fault('spikes', 3), sensor }) as SceneEvent);
    const { output } = scene(WITH_GAUGES, 60, passage(20, 'light engine', 30), ...events);
    const record = onlyPassage(output.passages);
    expect(record.peak.measured).toMatchObject({
      quality: 'poor',
      reason: 'no channel that may be trusted; sensor: spike',
    });
    expect(record.f1Hz.value).toBeNull();
    expect(record.quality).toBe('poor');
  });

  it('leaves the phases to wheel-rail noise when one axle sensor is dead, and says so', () => {
    const dead: SceneEvent = { ...fault('flat', 0), sensor: 'S2' } as SceneEvent;
    const { output, truths } = scene(WITH_GAUGES, 60, passage(20, 'regional multiple unit', 33), dead);
    const record = onlyPassage(output.passages);
    expect(record.axleCount).toMatchObject({ value: 12, quality: 'usable' });
    expect(Math.abs(record.phases.onMicros - truths[0]!.onMicros)).toBeLessThan(100_000);
    expect(Math.abs(record.phases.offMicros - truths[0]!.offMicros)).toBeLessThan(100_000);
  });
});

describe('a train that stops on the bridge', () => {
  it('is one passage from its first axle to its last', () => {
    const stop = { afterM: 30, standS: 40, brakingMs2: 0.6, startingMs2: 0.4 };
    const { output, truths } = scene(WITH_GAUGES, 180, passage(20, 'regional multiple unit', 6, { stop }));
    const record = onlyPassage(output.passages);
    expect(Math.abs(record.phases.onMicros - truths[0]!.onMicros)).toBeLessThan(100_000);
    expect(Math.abs(record.phases.offMicros - truths[0]!.offMicros)).toBeLessThan(100_000);
    expect(record.axleCount.value).toBe(12);
    expect(record.notes.join()).toMatch(/speed varied/);
  });
});

describe('two trains in short order', () => {
  it('are two passages, the first with a shorter free part', () => {
    const first = passage(20, 'light engine', 35);
    const second = passage(26, 'regional multiple unit', 35);
    const { output } = scene(WITH_GAUGES, 70, first, second);
    expect(output.passages.map(({ passage: { axleCount } }) => axleCount.value)).toEqual([4, 12]);
    const [one, two] = output.passages.map((window) => window.passage);
    expect(one!.endMicros).toBeLessThan(two!.phases.onMicros);
    expect(two!.notes.join()).toContain('quiet part of only');
  });
});

describe('a recording taken as one event', () => {
  it('is measured though no train is in it', () => {
    const blow: SceneEvent = { kind: 'blow', micros: at(5), alongM: 9, acrossM: 0.5, peakKn: 10, lengthS: 0.05 };
    const { channels } = simulate({
      definition: BARE,
      parameters: bridgeParameters(BARE),
      seed: 1,
      fromMicros: FROM,
      toMicros: at(20),
      events: [blow],
    });
    const windows = channels.map(({ sensor, rateHz, startMicros, samples }) => ({
      sensor,
      rateHz,
      runs: [{ startMicros, samples: Float32Array.from(samples) }],
    }));
    const whole = measureWhole(BARE, 1, windows)!;
    expect(whole.passage.phases.foundBy).toBe('given');
    expect(whole.passage.rawPeak.value).toBeGreaterThan(0.1);
    expect(recompute(BARE, 1, whole.passage, whole.channels)).toEqual(whole.passage);
    expect(measureWhole(BARE, 1, [])).toBeNull();
  });
});
