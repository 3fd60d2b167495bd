import { describe, expect, it } from 'vitest';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { Passage } from '#core/contract/passage.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { matchPulses } from '#core/passage/axles.ts';
import { bandOfLimit } from '#core/passage/band.ts';
import { firstDriven, lastDriven } from '#core/passage/forced-edge.ts';
import { measurePassage } from '#core/passage/measure.ts';
import { createPipeline, measureWhole, step } from '#core/passage/pipeline.ts';
import { arrangeRecord, trusted } from '#core/passage/record.ts';
import { noiseSpan, rollingNoise } from '#core/passage/rolling-noise.ts';
import { bridgeParameters } from '../../../simulator/parameters.ts';
import type { PassageEvent } from '../../../simulator/passage.ts';
import { simulate } from '../../../simulator/scene.ts';
import { createTrain, type TrainType } from '../../../simulator/train.ts';
import { deckSensor, gauge, plainBridge } from '../../support/bridges.ts';
import { createRandom } from '../../support/random.ts';
import { blocksOf, onlyPassage, runPipeline } from '../../support/scenes.ts';

const FROM = 1_780_000_000_000_000;
const at = (second: number): number => FROM + second * 1e6;

function crossing(second: number, type: TrainType, speedMs: number, change: Partial<PassageEvent> = {}): PassageEvent {
  return {
    kind: 'passage',
    train: createTrain(type, 7),
    onMicros: at(second),
    speedMs,
    direction: 'rising',
    ...change,
  };
}

function passagesOn(definition: BridgeDefinition, seconds: number, ...events: PassageEvent[]): Passage[] {
  const { channels } = simulate({
    definition,
    parameters: bridgeParameters(definition),
    seed: 42,
    fromMicros: FROM,
    toMicros: at(seconds),
    events,
  });
  return runPipeline(definition, blocksOf(definition.id, channels)).passages.map((window) => window.passage);
}

describe('trains on two tracks at once', () => {
  const span = plainBridge().spans[0]!;
  const twoTracks = plainBridge({
    spans: [{ ...span, tracks: 2, massPerMetreKg: 20_000 }],
    sensors: [
      ...['A1', 'A2', 'A3'].map((id, i) => deckSensor(id, 5 + 5 * i, { acrossM: i % 2 === 0 ? -3 : 3 })),
      gauge('S1', 0, { acrossM: -2 }),
      gauge('S2', 20, { acrossM: -2 }),
      gauge('S3', 0, { acrossM: 2 }),
      gauge('S4', 20, { acrossM: 2 }),
    ],
  });

  it('are one occupation; axles are counted together, a common speed is not made up', () => {
    const [passage, more] = passagesOn(
      twoTracks,
      60,
      crossing(20, 'regional multiple unit', 30, { track: 0 }),
      crossing(20.6, 'light engine', 25, { track: 1, direction: 'falling' }),
    );
    expect(more).toBeUndefined();
    expect(passage!.axleCount).toMatchObject({ value: 16, quality: 'usable' });
    expect(passage!.speedMs.value).toBeNull();
    expect(passage!.direction).toBeNull();
    expect(passage!.notes.join()).toMatch(/2 trains at once: .*12 axles towards rising.*4 axles towards falling/);
    expect(passage!.axles).toHaveLength(16);
  });

  it('are counted also where each track has one gauge, and then neither speed nor direction is known', () => {
    const sensors = twoTracks.sensors.filter(({ id }) => id !== 'S2' && id !== 'S4');
    const [passage] = passagesOn(
      { ...twoTracks, sensors },
      60,
      crossing(20, 'regional multiple unit', 30, { track: 0 }),
      crossing(20.6, 'light engine', 25, { track: 1, direction: 'falling' }),
    );
    expect(passage!.axleCount).toMatchObject({ value: 16, quality: 'usable' });
    expect(passage!.notes.join()).toMatch(/2 trains at once: 12 axles at unknown speed; 4 axles at unknown speed/);
    expect(passage!.phases.foundBy).toBe('wheel-rail noise');
  });

  it('are not made of one train and a gauge that speaks alone where its neighbour listens', () => {
    const { channels } = simulate({
      definition: twoTracks,
      parameters: bridgeParameters(twoTracks),
      seed: 42,
      fromMicros: FROM,
      toMicros: at(40),
      events: [crossing(20, 'light engine', 30, { track: 0 })],
    });
    const stray = channels.find(({ sensor }) => sensor === 'S3')!;
    for (const second of [20.3, 21.1]) {
      const centre = Math.round(second * stray.rateHz);
      for (let k = -8; k <= 8; k++) stray.samples[centre + k]! += 80 * Math.exp(-((k / 4) ** 2));
    }
    const [window] = runPipeline(twoTracks, blocksOf(twoTracks.id, channels)).passages;
    expect(window!.passage.axleCount).toMatchObject({ value: 4, quality: 'good' });
    expect(window!.passage.notes).toContain('only axle sensor S3 saw the train: not believed');
  });

  it('leave the other track alone when only one is used', () => {
    const [passage] = passagesOn(twoTracks, 60, crossing(20, 'light engine', 30, { track: 1 }));
    expect(passage!.axleCount).toMatchObject({ value: 4, quality: 'good' });
  });
});

describe('the band of a limit', () => {
  const sensor = { alongM: 10 };

  it('follows the code, or is fixed in the definition', () => {
    expect(bandOfLimit(plainBridge(), 'EN 1990 A2', sensor).upToHz).toBe(45);
    expect(bandOfLimit(plainBridge(), { upToHz: 30 }, sensor)).toEqual({
      upToHz: 30,
      setBy: 'fixed in the definition at 30 Hz',
    });
  });

  it('may differ between limits: each is judged in its own, the graver one is the passage peak', () => {
    const limit = plainBridge().limits[0]!;
    const bridge = plainBridge({
      sensors: [deckSensor('A1', 5), deckSensor('A2', 10), gauge('S1', 0), gauge('S2', 20)],
      limits: [
        { ...limit, id: 'low', band: { upToHz: 12 }, levels: { AL: 50 } },
        { ...limit, id: 'wide', levels: { AL: 0.01, IL: 0.02 } },
        { ...limit, id: 'elsewhere', spans: ['9'], levels: { AL: 0.001 } },
      ],
    });
    const [passage] = passagesOn(bridge, 60, crossing(20, 'light engine', 30));
    expect(passage!.peak).toMatchObject({ limit: 'wide', severity: 'IL' });
    expect(passage!.peak.ofGravest).toBeCloseTo(passage!.peak.measured.value! / 0.02, 9);
    const [low, wide, ...others] = passage!.channels.find(({ sensor: id }) => id === 'A1')!.limits;
    expect(low).toMatchObject({ limit: 'low', upToHz: 12, timeAboveS: { AL: 0 }, halfWavesAbove: { AL: 0 } });
    expect(wide).toMatchObject({ limit: 'wide', upToHz: 45, severity: 'IL' });
    expect(wide!.timeAboveS['AL']).toBeGreaterThan(wide!.timeAboveS['IL']!);
    expect(wide!.peak.value).toBeGreaterThan(low!.peak.value!);
    expect(others).toEqual([]);
  });

  it('is the code where there is no limit at all: a peak without a severity', () => {
    const [passage] = passagesOn(plainBridge({ limits: [] }), 60, crossing(20, 'light engine', 30));
    expect(passage!.peak.measured.value).toBeGreaterThan(0.05);
    expect(passage!.peak).toMatchObject({ limit: null, severity: null, ofGravest: null });
    expect(passage!.provenance.filter.upToHz).toBe(45);
  });

  it('is given up, and that is said, where the rate is too low for it', () => {
    const sensors = [
      deckSensor('A1', 5, { rateHz: 80 }),
      deckSensor('A2', 10, { rateHz: 80 }),
      gauge('S1', 0),
      gauge('S2', 20),
    ];
    const [passage] = passagesOn(plainBridge({ sensors }), 60, crossing(20, 'light engine', 30));
    const bandPeak = passage!.channels.find(({ sensor: id }) => id === 'A1')!.bandPeak;
    expect(bandPeak).toMatchObject({ quality: 'usable' });
    expect(bandPeak).toHaveProperty('reason', 'the rate of 80 Hz is too low to filter at 45 Hz; nothing was filtered');
  });
});

describe('what accelerometers alone cannot say', () => {
  const bare = (places: readonly number[], rateHz = 500): BridgeDefinition =>
    plainBridge({ sensors: places.map((alongM, i) => deckSensor(`A${i + 1}`, alongM, { rateHz })) });

  it('is the speed, where they stand at one place', () => {
    const [passage] = passagesOn(bare([10, 10.5]), 60, crossing(20, 'intercity', 35));
    expect(passage!.speedMs).toEqual({
      value: null,
      reason: 'no two axle sensors saw the train, and the deck sensors are too close together',
    });
  });

  it('is a sharp edge, where they are slower than 200 Hz', () => {
    const record = arrangeRecord(bare([5, 15], 100), windowsOf({ A1: noise(1), A2: noise(2) }, 100), at(5), at(10));
    expect(lastDriven([record], { fromMicros: at(6), toMicros: at(9) }, at(2))).toBeNull();
    expect(firstDriven([record], { fromMicros: at(1), toMicros: at(4) }, at(6))).toBeNull();
  });
});

describe('the edge of forced motion', () => {
  const bridge = plainBridge({ sensors: [deckSensor('A1', 5), deckSensor('A2', 12)] });
  // Free decay of two modes after 4 s, driven by a ramp before; a little noise.
  const motion = (seed: number, gain: number, drive = 3): Float32Array => {
    const random = createRandom(seed);
    return Float32Array.from({ length: 5000 }, (_, i) => {
      const t = i / 500 - 4;
      const free = Math.exp(-0.5 * t) * Math.cos(31 * t) + 0.4 * Math.exp(-1.2 * t) * Math.cos(62 * t + 1);
      const ramp = t < 0 ? -drive * t * Math.sin(9 * t) : 0;
      return gain * (Math.min(3, free) + ramp) + 0.004 * random.normal();
    });
  };
  const record = arrangeRecord(bridge, windowsOf({ A1: motion(1, 0.5), A2: motion(2, 0.9) }), FROM, at(10));

  it('is found within the 0.1 s that are promised of phases, from well after it', () => {
    const edge = lastDriven([record], { fromMicros: at(4.7), toMicros: at(8) }, at(3))!.micros;
    expect(Math.abs(edge - at(4)) / 1e6).toBeLessThan(0.1);
  });

  it('is that of the span that was driven last, or first, of several', () => {
    const late = arrangeRecord(bridge, windowsOf({ A1: motion(3, 0.5), A2: motion(4, 0.9) }), FROM, at(10)).map(
      (channel) => ({ ...channel, startMicros: channel.startMicros + 400_000 }),
    );
    const free = { fromMicros: at(5.2), toMicros: at(8) };
    const [one, other] = [record, late].map((span) => lastDriven([span], free, at(3))!.micros);
    expect(lastDriven([record, late], free, at(3))!.micros).toBe(Math.max(one!, other!));
    expect(lastDriven([late, record, []], free, at(3))!.micros).toBe(Math.max(one!, other!));
    const backwards = [record, late].map((span) => span.map((channel) => ({ ...channel, x: channel.x.toReversed() })));
    const before = { fromMicros: at(1), toMicros: at(4.4) };
    const [first, second] = backwards.map((span) => firstDriven([span], before, at(7))!.micros);
    expect(firstDriven(backwards, before, at(7))!.micros).toBe(Math.min(first!, second!));
    expect(firstDriven(backwards.toReversed(), before, at(7))!.micros).toBe(Math.min(first!, second!));
  });

  it('says how plainly the deck was driven: more so by a heavier train', () => {
    const [light, heavy] = [1, 6].map((drive) => {
      const own = arrangeRecord(
        bridge,
        windowsOf({ A1: motion(1, 0.5, drive), A2: motion(2, 0.9, drive) }),
        FROM,
        at(10),
      );
      return lastDriven([own], { fromMicros: at(4.7), toMicros: at(8) }, at(3))!.strength;
    });
    expect(light).toBeGreaterThan(16);
    expect(heavy).toBeGreaterThan(10 * light!);
  });

  it('is not made up where the deck is free all the time, or the free stretch is too short to learn from', () => {
    expect(lastDriven([record], { fromMicros: at(6), toMicros: at(9) }, at(4.5))).toBeNull();
    expect(lastDriven([record], { fromMicros: at(4.7), toMicros: at(5) }, at(3))).toBeNull();
    expect(firstDriven([[]], { fromMicros: at(0), toMicros: at(3) }, at(5))).toBeNull();
  });
});

describe('a bridge without a deck accelerometer', () => {
  it('has passages by its axle sensors; what it cannot measure says why', () => {
    const definition = plainBridge({ sensors: [gauge('S1', 0), gauge('S2', 20)] });
    const [passage] = passagesOn(definition, 40, crossing(20, 'light engine', 30));
    expect(passage!.axleCount.value).toBe(4);
    expect(passage!.peak).toMatchObject({
      measured: { value: null, reason: 'no deck channel with samples' },
      sensor: null,
      micros: null,
      severity: null,
    });
    expect(passage!.rawPeak.value).toBeNull();
    expect(passage!.f1Hz.value).toBeNull();
    expect(passage!.quality).toBe('poor');
  });
});

describe('a free decay', () => {
  it('too short for a fit is not measurable, with the reason', () => {
    // The next train follows so closely that only a fraction of a second rings freely.
    const passages = passagesOn(
      plainBridge(),
      60,
      crossing(20, 'light engine', 40),
      crossing(22.3, 'light engine', 40),
    );
    const first = passages[0]!;
    expect(first.f1Hz.value).toBeNull();
    expect(first.f1Hz).toHaveProperty('reason', expect.stringMatching(/free decay of \d\.\d s is too short|too few/));
  });

  it('of a bridge whose frequency is not known is found all the same', () => {
    const { id, startM, lengthM, structure, track } = plainBridge().spans[0]!;
    const known = plainBridge();
    const { channels } = simulate({
      definition: known,
      parameters: bridgeParameters(known),
      seed: 3,
      fromMicros: FROM,
      toMicros: at(60),
      events: [crossing(20, 'regional multiple unit', 33)],
    });
    const unknown = plainBridge({ spans: [{ id, startM, lengthM, structure, track }] });
    const passage = onlyPassage(runPipeline(unknown, blocksOf(unknown.id, channels)).passages);
    expect(Math.abs(passage.f1Hz.value! / 5 - 1)).toBeLessThan(0.01);
    expect(passage.provenance.filter).toMatchObject({ upToHz: 30, rule: '30 Hz, as neither f1 nor f3 is defined' });
  });
});

describe('a record', () => {
  it('knows clipped, flat, noisy and gappy channels and does not trust them', () => {
    const bridge = plainBridge({
      sensors: ['C', 'F', 'N', 'G', 'L', 'OK'].map((id) => deckSensor(id, 10, { range: [-5, 5], noiseLimit: 0.05 })),
    });
    const loud = noise(3).map((value) => value * 30);
    const clipped = noise(4).map((value, i) => (i > 4000 && i < 4005 ? 5 : value));
    const windows = windowsOf({ C: clipped, F: new Float32Array(5000).fill(0.2), N: loud, OK: noise(5) });
    windows.push({
      sensor: 'G',
      rateHz: 500,
      runs: [
        { startMicros: FROM, samples: noise(6).slice(0, 3000) },
        { startMicros: at(7), samples: noise(7).slice(0, 1500) },
      ],
    });
    windows.push({ sensor: 'L', rateHz: 500, runs: [{ startMicros: FROM, samples: noise(8).slice(0, 3000) }] });
    windows.push({ sensor: 'unknown', rateHz: 500, runs: [] });
    const flags = Object.fromEntries(
      arrangeRecord(bridge, windows, at(5), at(9.998)).map((channel) => [
        channel.sensor.id,
        [channel.flags.join(), trusted(channel)],
      ]),
    );
    expect(flags).toEqual({
      C: ['clipped', false],
      F: ['flat', false],
      N: ['noise high', false],
      G: ['gap', false],
      L: ['gap', false],
      OK: ['', true],
    });
  });

  it('without a quiet part has no offset and no noise', () => {
    const [channel] = arrangeRecord(plainBridge(), windowsOf({ A1: noise(1) }), FROM, at(10));
    expect(channel).toMatchObject({ offset: null, noise: null });
  });

  it('of silence holds no rolling noise', () => {
    const bridge = plainBridge();
    const record = arrangeRecord(bridge, windowsOf({ A1: noise(1), A2: noise(2) }), at(5), at(10));
    expect(noiseSpan(rollingNoise(bridge, record, at(5))!)).toBeNull();
    expect(rollingNoise(bridge, [], at(5))).toBeNull();
    expect(
      measurePassage(bridge, 1, { id: 'x', triggerMicros: at(5), fromMicros: FROM, toMicros: at(10), cut: null }, []),
    ).toBeNull();
  });

  it('taken whole says of each channel what it can: one that ended early has nothing to say', () => {
    const windows = windowsOf({ A1: noise(1) });
    windows.push({ sensor: 'A2', rateHz: 500, runs: [{ startMicros: FROM, samples: noise(2).slice(0, 4) }] });
    windows.push({ sensor: 'S1', rateHz: 500, runs: [{ startMicros: FROM, samples: noise(3) }] });
    const { passage } = measureWhole(plainBridge(), 1, windows)!;
    const [, a2, s1] = passage.channels;
    expect(a2!.rawPeak).toEqual({
      value: null,
      reason: 'no samples of the event',
    });
    expect(s1!.bandPeak).toEqual({ value: null, reason: 'the band rule is for deck acceleration' });
    expect(passage.temperatureC).toEqual({ value: null, reason: 'no temperature sample near the passage' });
    // Nobody knows of a train, nor which part is quiet, nor where it would ring off.
    expect(passage.phases.foundBy).toBe('given');
    expect(passage.speedMs).toEqual({ value: null, reason: 'no train was recognised' });
    expect(passage.f1Hz).toEqual({ value: null, reason: 'the record ends with the event: no free decay in it' });
    expect(passage.channels.map(({ noise }) => noise)).toEqual(
      passage.channels.map(() => ({
        value: null,
        reason: 'the whole recording is one event: none of it is taken for quiet',
      })),
    );
  });
});

describe('pulses where a train stood on a gauge', () => {
  const pulses = (...seconds: readonly [number, number][]) =>
    seconds.map(([s, height]) => ({ micros: s * 1e6, height }));

  it('are paired without the low one that its standing left', () => {
    const low = pulses([1, 90], [2, 90], [9, 12], [30, 90]);
    const high = pulses([20, 90], [33, 90], [34, 90]);
    const { pairs, complete } = matchPulses(low, high);
    expect(complete).toBe(false);
    expect(pairs.map(([a]) => a.micros / 1e6)).toEqual([1, 2, 30]);
  });

  it('are paired without all the low ones that a long stand left', () => {
    const through = [1, 2, 5, 6, 40, 41, 44, 45].map((s): [number, number] => [s, 180]);
    const later = through.map(([s, height]): [number, number] => [s < 10 ? 45 + s / 2 : s + 8, height - 5]);
    const wiggles = [20, 22, 26, 31].map((s): [number, number] => [s, 44]);
    const { pairs, complete, axles } = matchPulses(
      pulses(...through),
      pulses(...[...wiggles, ...later].toSorted((a, b) => a[0] - b[0])),
    );
    expect(axles).toBe(8);
    expect(complete).toBe(false);
    expect(pairs.map(([a]) => a.micros / 1e6)).toEqual(through.map(([s]) => s));
    expect(pairs.map(([, b]) => b.micros / 1e6)).toEqual(later.map(([s]) => s));
  });

  it('are not paired when too many are over', () => {
    expect(matchPulses(pulses([1, 9], [2, 9], [3.1, 9], [4.7, 9]), pulses([20, 9])).pairs).toEqual([]);
  });
});

describe('the pipeline', () => {
  it('passes over channels that the bridge does not have', () => {
    const state = createPipeline(plainBridge(), 1);
    const output = step(state, {
      bridge: 'plain',
      logger: 'L1',
      sequence: 1,
      startMicros: FROM,
      rateHz: 500,
      channels: [{ sensor: 'Z9', samples: new Float64Array(100) }],
    });
    expect(output.live).toEqual([]);
  });

  it('goes on without a channel that has died, after waiting a while', () => {
    const bridge = plainBridge({ sensors: [deckSensor('A1', 5), deckSensor('A2', 10), deckSensor('A3', 15)] });
    const { channels } = simulate({
      definition: bridge,
      parameters: bridgeParameters(bridge),
      seed: 4,
      fromMicros: FROM,
      toMicros: at(70),
      events: [crossing(30, 'intercity', 38)],
    });
    const dying = channels.map((channel) =>
      channel.sensor === 'A3' ? { ...channel, samples: channel.samples.slice(0, 5000) } : channel,
    );
    const passage = onlyPassage(runPipeline(bridge, blocksOf(bridge.id, dying)).passages);
    expect(passage.channels.map(({ sensor }) => sensor)).toEqual(['A1', 'A2']);
  });
});

function noise(seed: number): Float32Array {
  const random = createRandom(seed);
  return Float32Array.from({ length: 5000 }, () => 0.005 * random.normal());
}

function windowsOf(samples: Record<string, Float32Array>, rateHz = 500): WindowChannel[] {
  return Object.entries(samples).map(([sensor, values]) => ({
    sensor,
    rateHz,
    runs: [{ startMicros: FROM, samples: values }],
  }));
}
