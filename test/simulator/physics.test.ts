import { describe, expect, it } from 'vitest';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { beamModes, beamMotion } from '#core/mechanics/moving-force.ts';
import { welch } from '#core/signal/welch.ts';
import { campaignScene } from '../../simulator/campaign.ts';
import type { SceneEvent } from '../../simulator/nuisance.ts';
import { bridgeParameters, cleanParameters } from '../../simulator/parameters.ts';
import type { PassageEvent } from '../../simulator/passage.ts';
import { simulate } from '../../simulator/scene.ts';
import { createBridgeSimulation, type SimulatedChannel } from '../../simulator/simulation.ts';
import { createTrain } from '../../simulator/train.ts';
import { deckSensor, gauge, plainBridge } from '../support/bridges.ts';

const FROM = 1_780_000_000_000_000;
const at = (second: number): number => FROM + second * 1e6;

const BEAM = plainBridge({
  spans: [{ ...plainBridge().spans[0]!, massPerMetreKg: 10_000, dampingPercent: 1 }],
  sensors: [
    deckSensor('A1', 5),
    deckSensor('A2', 10),
    deckSensor('L', 10, { acrossM: -2 }),
    deckSensor('R', 10, { acrossM: 2 }),
    gauge('S1', 0),
  ],
});

function crossing(speedMs: number, change: Partial<PassageEvent> = {}): PassageEvent {
  return {
    kind: 'passage',
    train: createTrain('light engine', 3),
    onMicros: at(20),
    speedMs,
    direction: 'rising',
    ...change,
  };
}

function run(definition: BridgeDefinition, parameters: ReturnType<typeof bridgeParameters>, ...events: SceneEvent[]) {
  return simulate({ definition, parameters, seed: 5, fromMicros: FROM, toMicros: at(30), events });
}

const channel = (channels: readonly SimulatedChannel[], sensor: string): Float64Array =>
  channels.find((one) => one.sensor === sensor)!.samples;

describe('the simulated bridge', () => {
  it('moves its sensors as the closed form of moving forces says', () => {
    const event = crossing(37);
    const { channels } = run(BEAM, cleanParameters(BEAM, { bending: 3, torsion: 0 }), event);
    const modes = beamModes({ lengthM: 20, massPerMetreKg: 10_000, f1Hz: 5, zeta: 0.01 }, 3);
    const forces = event.train.axles.map(({ behindFirstM, loadKn }) => ({
      behindM: behindFirstM,
      forceN: 1000 * loadKn,
    }));
    for (const [sensor, alongM] of [
      ['A1', 5],
      ['A2', 10],
    ] as const) {
      const samples = channel(channels, sensor);
      let most = 0;
      let highest = 0;
      for (let i = 19 * 500; i < 25 * 500; i++) {
        const wanted = beamMotion(modes, forces, 37, alongM, i / 500 - 20).accelerationMs2;
        most = Math.max(most, Math.abs(samples[i]! - wanted));
        highest = Math.max(highest, Math.abs(wanted));
      }
      // Force by straight lines between steps of a millisecond at most: 0.5 % of the highest value at the kinks.
      expect(most / highest, sensor).toBeLessThan(0.005);
    }
  });

  it('twists the two sides of the deck against each other', () => {
    const parameters = cleanParameters(BEAM, { bending: 0, torsion: 1 });
    parameters.structure.eccentricityM = 0.3;
    const { channels } = run(BEAM, parameters, crossing(30));
    const [left, right] = [channel(channels, 'L'), channel(channels, 'R')];
    expect(Math.max(...right)).toBeGreaterThan(0);
    right.forEach((value, i) => expect(Math.abs(value + left[i]!)).toBeLessThan(1e-9));
  });

  it('adds up two trains while its law is linear', () => {
    const parameters = cleanParameters(BEAM, { bending: 2, torsion: 0 });
    const first = crossing(30);
    const second = crossing(22, { onMicros: at(20.7) });
    const [both, one, other] = [[first, second], [first], [second]].map((events) =>
      channel(run(BEAM, parameters, ...events).channels, 'A2'),
    );
    both!.forEach((value, i) => expect(Math.abs(value - one![i]! - other![i]!)).toBeLessThan(1e-9));
  });

  it('gives the same samples for the same seed and for any steps of its advance', () => {
    const options = { definition: BEAM, parameters: bridgeParameters(BEAM), seed: 9, startMicros: FROM };
    const whole = createBridgeSimulation(options);
    const stepped = createBridgeSimulation(options);
    for (const one of [whole, stepped]) one.schedule(crossing(30));
    const wanted = channel(whole.advance(at(24)), 'A2');
    const parts: number[] = [];
    for (const second of [0.013, 3, 3.0001, 19.99, 20.5, 24]) parts.push(...channel(stepped.advance(at(second)), 'A2'));
    expect(parts).toEqual([...wanted]);
  });

  it('tells the truth of when the first axle comes', () => {
    const { channels, truths } = run(BEAM, bridgeParameters(BEAM), crossing(30));
    const gaugeSamples = channel(channels, 'S1');
    const quiet = gaugeSamples.slice(0, 18 * 500).reduce((sum, value) => sum + value, 0) / (18 * 500);
    const rising = gaugeSamples.findIndex((value) => value - quiet > 50);
    const first = [...gaugeSamples.slice(rising, rising + 15)];
    const crest = rising + first.indexOf(Math.max(...first));
    expect(Math.abs(FROM + crest * 2000 - truths[0]!.onMicros)).toBeLessThan(6000);
  });

  it('is hardly moved by wind above 25 Hz', () => {
    const wind: SceneEvent = { kind: 'wind', fromMicros: at(2), toMicros: at(29), rmsMs2: 0.08 };
    const parameters = { ...cleanParameters(BEAM, { bending: 3, torsion: 0 }) };
    const samples = channel(run(BEAM, parameters, wind).channels, 'A2').slice(6 * 500, 26 * 500);
    const { psd, stepHz } = welch(samples, 500, { segment: 1024 });
    const power = (from: number, to: number): number =>
      psd.reduce((sum, p, k) => (k * stepHz >= from && k * stepHz < to ? sum + p * stepHz : sum), 0);
    // No louder than a good accelerometer is by itself, 5 mm/s² r.m.s. (common practice), in a wind that shakes the first mode.
    expect(Math.sqrt(power(2, 25))).toBeGreaterThan(0.03);
    expect(Math.sqrt(power(25, 250))).toBeLessThan(0.005);
  });

  it('shakes most at the speed at which coaches keep time with it', () => {
    const peakAt = (speedMs: number): number => {
      const event = crossing(speedMs, { train: createTrain('intercity', 3) });
      return Math.max(
        ...channel(run(SHORT, cleanParameters(SHORT, { bending: 1, torsion: 0 }), event).channels, 'A2').map(Math.abs),
      );
    };
    // v = f1 d / i (reference sheet 3.2): 5.2 Hz × 26.4 m / 3 = 45.8 m/s; the span of 17.6 m is 2/3 of a coach, far from cancellation.
    const resonant = peakAt((5.2 * 26.4) / 3);
    for (const speed of [38, 41, 44, 48, 51, 54]) expect(resonant, `${speed} m/s`).toBeGreaterThan(1.2 * peakAt(speed));
    expect(resonant).toBeGreaterThan(3 * peakAt(41));
  });
});

const SHORT = plainBridge({
  spans: [
    {
      ...plainBridge().spans[0]!,
      lengthM: 17.6,
      massPerMetreKg: 8800,
      frequenciesHz: { f1: 5.2 },
      dampingPercent: 1.3,
    },
  ],
  sensors: [deckSensor('A2', 8.8)],
});

describe('a simulated passage', () => {
  it('stays a number where an axle enters the far end at a step of the simulation to the last bit', () => {
    const { channels } = simulate(campaignScene(384, 17));
    for (const { samples } of channels) expect(samples.every(Number.isFinite)).toBe(true);
  });
});
