import { Type } from 'typebox';
import { describe, expect, it } from 'vitest';
import type { Passage } from '#core/contract/passage.ts';
import { trainMotion } from '#core/mechanics/moving-force.ts';
import { createPipeline, finish, step } from '#core/passage/pipeline.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import {
  closedFormBlock,
  closedFormBridge,
  cutBlock,
  EPOCH,
  LEAD_SECONDS,
  type ClosedFormCase,
} from '../../support/closed-form.ts';

const RATES = [200, 256, 500, 1000];

/** Bounds of the main job on clean data: peaks 0.5 %, speed 1 %, axles exact, f1 0.1 %, damping 3 %. */
const BOUND = { peak: 0.005, speed: 0.01, f1: 0.001, zeta1: 0.03 };

function passagesOf(input: ClosedFormCase): Passage[] {
  const state = createPipeline(closedFormBridge(input), 1);
  const block = closedFormBlock(input);
  const length = block.channels[0]!.samples.length;
  const size = input.rateHz / 4;
  const passages: Passage[] = [];
  for (let at = 0; at < length; at += size) {
    passages.push(...step(state, cutBlock(block, at, Math.min(length, at + size))).passages.map((w) => w.passage));
  }
  passages.push(...finish(state).passages.map((w) => w.passage));
  return passages;
}

function within(actual: number | null, wanted: number, share: number): void {
  expect(actual).not.toBeNull();
  expect(Math.abs(actual! / wanted - 1), `${String(actual)} against ${wanted}`).toBeLessThanOrEqual(share);
}

function expectPassage(input: ClosedFormCase, peak: number): void {
  const passages = passagesOf(input);
  expect(passages).toHaveLength(1);
  const passage = passages[0]!;
  within(passage.peak.measured.value, peak, BOUND.peak);
  within(passage.rawPeak.value, peak, BOUND.peak);
  within(passage.speedMs.value, input.speedMs, BOUND.speed);
  expect(passage.axleCount.value).toBe(input.forces.length);
  expect(passage.direction).toBe('rising');
  within(passage.f1Hz.value, input.mode.frequencyHz, BOUND.f1);
  if (input.mode.zeta > 0) within(passage.zeta1.value, input.mode.zeta, BOUND.zeta1);
  const start = EPOCH + LEAD_SECONDS * 1e6;
  const lastM = Math.max(...input.forces.map(({ behindM }) => behindM));
  expect(Math.abs(passage.phases.onMicros - start)).toBeLessThan(5_000);
  const end = start + ((lastM + input.mode.lengthM) / input.speedMs) * 1e6;
  expect(Math.abs(passage.phases.offMicros - end)).toBeLessThan(5_000);
}

const Peak = Type.Object({ a_m_s2: Type.Number() });

describeChecks('single moving force, closed form beam.single.K025, through the whole pipeline', () => {
  it.each(RATES)('reads peak, speed, axle, frequency and damping at %i Hz', (rateHz) => {
    const { inputs, expected } = check(
      'beam.single.K025',
      Type.Object({ 'mode1_zeta_0.01': Type.Object({ max_abs_a_on_bridge: Peak, max_abs_a_free: Peak }) }),
      Type.Object({
        L_m: Type.Number(),
        m_kg_per_m: Type.Number(),
        f1_Hz: Type.Number(),
        P_N: Type.Number(),
        v_m_s: Type.Number(),
      }),
    );
    const damped = expected['mode1_zeta_0.01'];
    const peak = Math.max(Math.abs(damped.max_abs_a_on_bridge.a_m_s2), Math.abs(damped.max_abs_a_free.a_m_s2));
    // The maximum comes after the force has left: a window that ends with the train reads 36 % low (trap 1).
    expect(peak).toBe(Math.abs(damped.max_abs_a_free.a_m_s2));
    const mode = {
      lengthM: inputs.L_m,
      massPerMetreKg: inputs.m_kg_per_m,
      order: 1,
      frequencyHz: inputs.f1_Hz,
      zeta: 0.01,
    };
    expectPassage({ mode, forces: [{ behindM: 0, forceN: inputs.P_N }], speedMs: inputs.v_m_s, rateHz }, peak);
  });
});

const TrainInputs = Type.Object({
  L_m: Type.Number(),
  m_kg_per_m: Type.Number(),
  f1_Hz: Type.Number(),
  P_N: Type.Number(),
  v_m_s: Type.Number(),
  zeta: Type.Number(),
  n_loads: Type.Number(),
  spacing_m: Type.Number(),
});

describeChecks('ten equal forces, closed forms beam.train_*, through the whole pipeline', () => {
  const groups = [
    'beam.train_resonance_first_order',
    'beam.train_resonance_second_order',
    'beam.train_cancellation_v_66p667',
  ];
  const cases = groups.flatMap((id) => RATES.map((rateHz) => ({ id, rateHz })));
  it.each(cases)('$id at $rateHz Hz', ({ id, rateHz }) => {
    const { inputs, expected } = check(id, Type.Object({ max_abs_a: Peak }), TrainInputs);
    const mode = {
      lengthM: inputs.L_m,
      massPerMetreKg: inputs.m_kg_per_m,
      order: 1,
      frequencyHz: inputs.f1_Hz,
      zeta: inputs.zeta,
    };
    const forces = Array.from({ length: inputs.n_loads }, (_, i) => ({
      behindM: i * inputs.spacing_m,
      forceN: inputs.P_N,
    }));
    expectPassage({ mode, forces, speedMs: inputs.v_m_s, rateHz }, Math.abs(expected.max_abs_a.a_m_s2));
  });
});

describeChecks('single force at cancellation speeds, closed form beam.cancellation, through the whole pipeline', () => {
  it.each(RATES)('finds frequency and damping in the faint residual at %i Hz', (rateHz) => {
    const { inputs, expected } = check(
      'beam.cancellation',
      Type.Array(Type.Object({ v_m_s: Type.Number(), zeta: Type.Number(), free_acc_amplitude_m_s2: Type.Number() })),
      Type.Object({ L_m: Type.Number(), m_kg_per_m: Type.Number(), f1_Hz: Type.Number(), P_N: Type.Number() }),
    );
    for (const { v_m_s: speedMs, zeta, free_acc_amplitude_m_s2: free } of expected) {
      if (zeta === 0) continue;
      const mode = {
        lengthM: inputs.L_m,
        massPerMetreKg: inputs.m_kg_per_m,
        order: 1,
        frequencyHz: inputs.f1_Hz,
        zeta,
      };
      const passage = passagesOf({ mode, forces: [{ behindM: 0, forceN: inputs.P_N }], speedMs, rateHz })[0]!;
      within(passage.f1Hz.value, inputs.f1_Hz, BOUND.f1);
      within(passage.zeta1.value, zeta, BOUND.zeta1);
      within(passage.speedMs.value, speedMs, BOUND.speed);
      // The record's peak is that of the closed form on a grid far finer than the samples.
      const fine = Array.from({ length: 40_000 }, (_, i) => i / 20_000);
      const forces = [{ behindM: 0, forceN: inputs.P_N }];
      const peak = Math.max(...fine.map((t) => Math.abs(trainMotion(mode, forces, speedMs, t).accelerationMs2)));
      expect(peak).toBeGreaterThan(free);
      within(passage.peak.measured.value, peak, BOUND.peak);
    }
  });
});

describe('a train that runs the other way', () => {
  it('is seen with the other direction and the same numbers', () => {
    const mode = { lengthM: 20, massPerMetreKg: 1e4, order: 1, frequencyHz: 5, zeta: 0.01 };
    const input = {
      mode,
      forces: [
        { behindM: 0, forceN: 2e5 },
        { behindM: 2.5, forceN: 2e5 },
      ],
      speedMs: 40,
      rateHz: 500,
    };
    const block = closedFormBlock(input);
    const [deck, first, second] = block.channels;
    const mirrored = {
      ...block,
      channels: [deck!, { sensor: 'S1', samples: second!.samples }, { sensor: 'S2', samples: first!.samples }],
    };
    const run = (samples: typeof block): Passage => {
      const state = createPipeline(closedFormBridge(input), 1);
      const found = [...step(state, samples).passages, ...finish(state).passages];
      expect(found).toHaveLength(1);
      return found[0]!.passage;
    };
    const there = run(block);
    const back = run(mirrored);
    expect(there.direction).toBe('rising');
    expect(back.direction).toBe('falling');
    expect(back.speedMs).toEqual(there.speedMs);
    expect(back.phases.onMicros).toBe(there.phases.onMicros);
    expect(back.phases.offMicros).toBe(there.phases.offMicros);
  });
});
