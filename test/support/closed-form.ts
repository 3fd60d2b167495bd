import type { SampleBlock } from '#core/contract/block.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { sampleMicros, type Micros } from '#core/contract/time.ts';
import { trainMotion, type BeamMode, type MovingForce } from '#core/mechanics/moving-force.ts';

/** A bridge whose mid-span acceleration follows the closed form of moving forces exactly; rail gauges at both bearings. */
export interface ClosedFormCase {
  mode: BeamMode;
  forces: MovingForce[];
  speedMs: number;
  rateHz: number;
}

export const EPOCH: Micros = 1_760_000_000_000_000;
export const LEAD_SECONDS = 10;

export function closedFormBridge({ mode, rateHz }: ClosedFormCase): BridgeDefinition {
  const gauge = { quantity: 'strain', logger: 'L1', mount: 'rail', unit: 'um/m', rateHz, countsAxles: true } as const;
  const f1 = mode.frequencyHz;
  return {
    spanbeat: 1,
    id: 'beam',
    name: 'Closed form',
    line: { name: 'Reference line' },
    chainageKm: 1,
    spans: [
      {
        id: '1',
        startM: 0,
        lengthM: mode.lengthM,
        structure: 'steel trough',
        track: 'ballasted',
        massPerMetreKg: mode.massPerMetreKg,
        frequenciesHz: { f1 },
        dampingPercent: mode.zeta > 0 ? mode.zeta * 100 : 1,
      },
    ],
    loggers: [{ id: 'L1' }],
    sensors: [
      {
        id: 'A1',
        quantity: 'acceleration',
        logger: 'L1',
        mount: 'deck',
        alongM: mode.lengthM / 2,
        unit: 'm/s2',
        rateHz,
      },
      { ...gauge, id: 'S1', alongM: 0 },
      { ...gauge, id: 'S2', alongM: mode.lengthM },
    ],
    limits: [
      {
        id: 'deck',
        quantity: 'peak deck acceleration',
        levels: { AL: 0.3, IL: 0.8, IAL: 3.5 },
        band: 'EN 1990 A2',
        source: 'EN 1990 A2.4.4.2.1(4)P',
      },
    ],
  };
}

/** Influence of one wheel on a rail gauge: a bell of this standard deviation, m (of the order of a sleeper bay). */
const GAUGE_SIGMA_M = 0.35;

/** The whole crossing as one block: quiet, train, free decay. */
export function closedFormBlock(input: ClosedFormCase, tailSeconds = 25): SampleBlock {
  const { mode, forces, speedMs, rateHz } = input;
  const lastM = Math.max(...forces.map(({ behindM }) => behindM));
  const seconds = LEAD_SECONDS + (lastM + mode.lengthM) / speedMs + tailSeconds;
  const n = Math.floor(seconds * rateHz);
  const a = new Float64Array(n);
  const s1 = new Float64Array(n);
  const s2 = new Float64Array(n);
  for (let i = 0; i < n; i++) {
    const t = i / rateHz - LEAD_SECONDS;
    a[i] = trainMotion(mode, forces, speedMs, t).accelerationMs2;
    for (const { behindM } of forces) {
      const place = speedMs * t - behindM;
      s1[i]! += 100 * Math.exp(-0.5 * (place / GAUGE_SIGMA_M) ** 2);
      s2[i]! += 100 * Math.exp(-0.5 * ((place - mode.lengthM) / GAUGE_SIGMA_M) ** 2);
    }
  }
  return {
    bridge: 'beam',
    logger: 'L1',
    sequence: null,
    startMicros: EPOCH,
    rateHz,
    channels: [
      { sensor: 'A1', samples: a },
      { sensor: 'S1', samples: s1 },
      { sensor: 'S2', samples: s2 },
    ],
  };
}

/** Samples [from, to) of a block, as a block of its own. */
export function cutBlock(block: SampleBlock, from: number, to: number): SampleBlock {
  return {
    ...block,
    startMicros: sampleMicros(block.startMicros, from, block.rateHz),
    channels: block.channels.map(({ sensor, samples }) => ({ sensor, samples: samples.slice(from, to) })),
  };
}
