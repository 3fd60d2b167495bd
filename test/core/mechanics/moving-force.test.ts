import { Type } from 'typebox';
import { describe, expect, it } from 'vitest';
import {
  beamModes,
  beamMotion,
  freeAccelerationAmplitude,
  freeMotion,
  movingForceMotion,
  trainMotion,
  type BeamMode,
} from '#core/mechanics/moving-force.ts';
import { check, describeChecks } from '../../reference/checks.ts';

const Sample = Type.Object({ t_s: Type.Number(), w_m: Type.Number(), v_m_s: Type.Number(), a_m_s2: Type.Number() });
const Case = Type.Object({
  samples: Type.Array(Sample),
  free_acceleration_amplitude_at_exit_m_s2: Type.Number(),
  exit_state: Type.Object({ w_m: Type.Number(), v_m_s: Type.Number() }),
});
const ModesAt = Type.Object({
  t_s: Type.Number(),
  modes_up_to: Type.Number(),
  w_mid_m: Type.Number(),
  a_mid_m_s2: Type.Number(),
});

const beam = (zeta: number): BeamMode => ({ lengthM: 20, massPerMetreKg: 1e4, order: 1, frequencyHz: 5, zeta });
const single = () =>
  check(
    'beam.single.K025',
    Type.Object({
      mode1_zeta_0: Case,
      'mode1_zeta_0.01': Case,
      multimode_zeta_0p01_all_modes: Type.Array(ModesAt),
      quarter_span_3modes_zeta_0p01: Type.Array(
        Type.Object({ t_s: Type.Number(), w_m: Type.Number(), a_m_s2: Type.Number() }),
      ),
    }),
  );

/** Within the group's tolerance, relative or absolute, of a value that is printed to ten digits. */
function near(actual: number, wanted: number, tolerance: { rel: number; abs: number }): void {
  const bound = Math.max(tolerance.abs, (tolerance.rel || 1e-6) * Math.abs(wanted), 1e-9);
  expect(Math.abs(actual - wanted), `${actual} against ${wanted}`).toBeLessThanOrEqual(bound);
}

describeChecks('one force over a simply supported beam (beam.single.K025)', () => {
  it.each([0, 0.01])('moves the first mode as the closed form says, damping ratio %f', (zeta) => {
    const { expected, tolerance } = single();
    const wanted = zeta === 0 ? expected.mode1_zeta_0 : expected['mode1_zeta_0.01'];
    for (const { t_s, w_m, v_m_s, a_m_s2 } of wanted.samples) {
      const motion = movingForceMotion(beam(zeta), 2e5, 50, t_s);
      near(motion.displacementM, w_m, tolerance);
      near(motion.velocityMs, v_m_s, tolerance);
      near(motion.accelerationMs2, a_m_s2, tolerance);
    }
    const exit = movingForceMotion(beam(zeta), 2e5, 50, 0.4);
    near(freeAccelerationAmplitude(beam(zeta), exit), wanted.free_acceleration_amplitude_at_exit_m_s2, tolerance);
  });

  it('adds up its higher modes at mid span and quarter span', () => {
    const { expected, tolerance } = single();
    const modes = beamModes({ lengthM: 20, massPerMetreKg: 1e4, f1Hz: 5, zeta: 0.01 }, 9);
    const force = [{ behindM: 0, forceN: 2e5 }];
    for (const { t_s, modes_up_to, w_mid_m, a_mid_m_s2 } of expected.multimode_zeta_0p01_all_modes) {
      const motion = beamMotion(modes.slice(0, modes_up_to), force, 50, 10, t_s);
      near(motion.displacementM, w_mid_m, tolerance);
      near(motion.accelerationMs2, a_mid_m_s2, tolerance);
    }
    for (const { t_s, w_m, a_m_s2 } of expected.quarter_span_3modes_zeta_0p01) {
      const motion = beamMotion(modes.slice(0, 3), force, 50, 5, t_s);
      near(motion.displacementM, w_m, tolerance);
      near(motion.accelerationMs2, a_m_s2, tolerance);
    }
  });

  it('leaves the residuals of the cancellation speeds (beam.cancellation)', () => {
    const { expected, tolerance } = check(
      'beam.cancellation',
      Type.Array(Type.Object({ v_m_s: Type.Number(), zeta: Type.Number(), free_acc_amplitude_m_s2: Type.Number() })),
    );
    for (const { v_m_s, zeta, free_acc_amplitude_m_s2 } of expected) {
      // The sheet prints speeds to ten digits; the exact cancellation speed is 200 / (2k + 1).
      const speed = 200 / Math.round(200 / v_m_s);
      const exit = movingForceMotion(beam(zeta), 2e5, speed, 20 / speed);
      near(freeAccelerationAmplitude(beam(zeta), exit), free_acc_amplitude_m_s2, tolerance);
    }
  });

  it('has the residual maxima of beam.free_maxima', () => {
    const { expected } = check(
      'beam.free_maxima',
      Type.Object({
        maxima: Type.Array(Type.Object({ K: Type.Number(), free_amp_over_first_mode_static: Type.Number() })),
      }),
    );
    for (const { K, free_amp_over_first_mode_static } of expected.maxima) {
      const speed = K * 200;
      const exit = movingForceMotion(beam(0), 2e5, speed, 20 / speed);
      const omega = 10 * Math.PI;
      const statically = (2 * 2e5) / (1e4 * 20 * omega ** 2);
      const amplitude = freeAccelerationAmplitude(beam(0), exit) / omega ** 2;
      expect(Math.abs(amplitude / statically / free_amp_over_first_mode_static - 1)).toBeLessThan(1e-7);
    }
  });

  it('has the greatest dynamic factor of phi.envelope', () => {
    const { expected } = check(
      'phi.envelope',
      Type.Array(Type.Object({ K: Type.Number(), max_dyn_over_mode1_static: Type.Number() })),
    );
    for (const { K, max_dyn_over_mode1_static } of expected) {
      // At K = 1 the formula is a limit; a hair beside it is within the tolerance.
      const speed = (K === 1 ? 1 - 1e-7 : K) * 200;
      const steps = 40_000;
      let most = 0;
      for (let i = 0; i <= steps; i++) {
        const t = (i / steps) * (20 / speed + 0.2);
        most = Math.max(most, Math.abs(movingForceMotion(beam(0), 2e5, speed, t).displacementM));
      }
      const statically = (2 * 2e5) / (1e4 * 20 * (10 * Math.PI) ** 2);
      expect(Math.abs(most / statically / max_dyn_over_mode1_static - 1)).toBeLessThan(1e-6);
    }
  });
});

describeChecks('ten forces', () => {
  const Peak = Type.Object({ t_s: Type.Number(), a_m_s2: Type.Number() });
  it.each([
    'beam.train_resonance_first_order',
    'beam.train_resonance_second_order',
    'beam.train_cancellation_v_66p667',
  ])('build up as %s says', (id) => {
    const { inputs, expected, tolerance } = check(
      id,
      Type.Object({ max_abs_a: Peak, free_acc_amplitude_after_last_exit_m_s2: Type.Number() }),
      Type.Object({ P_N: Type.Number(), v_m_s: Type.Number(), zeta: Type.Number(), spacing_m: Type.Number() }),
    );
    const forces = Array.from({ length: 10 }, (_, i) => ({ behindM: i * inputs.spacing_m, forceN: inputs.P_N }));
    const mode = beam(inputs.zeta);
    near(
      trainMotion(mode, forces, inputs.v_m_s, expected.max_abs_a.t_s).accelerationMs2,
      expected.max_abs_a.a_m_s2,
      tolerance,
    );
    const exit = trainMotion(mode, forces, inputs.v_m_s, (9 * inputs.spacing_m + 20) / inputs.v_m_s);
    near(freeAccelerationAmplitude(mode, exit), expected.free_acc_amplitude_after_last_exit_m_s2, tolerance);
  });

  it('build up by the geometric series of beam.buildup at resonance', () => {
    const { expected } = check(
      'beam.buildup',
      Type.Array(Type.Object({ zeta: Type.Number(), i: Type.Number(), G_10: Type.Number() })),
    );
    for (const { zeta, i, G_10 } of expected) {
      // Loads i undamped cycles apart leave residuals that add in phase but for the damped frequency's small lag.
      const mode = beam(zeta);
      const spacing = (i * 37) / (5 * Math.sqrt(1 - zeta ** 2));
      const one = freeAccelerationAmplitude(mode, movingForceMotion(mode, 1e5, 37, 20 / 37));
      const forces = Array.from({ length: 10 }, (_, k) => ({ behindM: k * spacing, forceN: 1e5 }));
      const exit = trainMotion(mode, forces, 37, (9 * spacing + 20) / 37);
      // exp(-2πζi) of the series against exp(-2πζi/√(1-ζ²)) here: apart by 9 · 2πi ζ³/2 at most.
      expect(Math.abs(freeAccelerationAmplitude(mode, exit) / one / G_10 - 1)).toBeLessThan(60 * i * zeta ** 3 + 1e-9);
    }
  });
});

describe('the laws of mechanics', () => {
  it('hold against integration in tiny steps (Runge and Kutta, fourth order)', () => {
    const mode = beam(0.02);
    const omega = 2 * Math.PI * 5;
    const rate = (t: number, w: number, v: number): number =>
      (t < 0.4 ? 2 * Math.sin((Math.PI * 50 * t) / 20) : 0) - 2 * 0.02 * omega * v - omega ** 2 * w;
    const h = 1e-4;
    let [w, v] = [0, 0];
    for (let i = 0; i < 8000; i++) {
      const t = i * h;
      const [k1, l1] = [v, rate(t, w, v)];
      const [k2, l2] = [v + (h / 2) * l1, rate(t + h / 2, w + (h / 2) * k1, v + (h / 2) * l1)];
      const [k3, l3] = [v + (h / 2) * l2, rate(t + h / 2, w + (h / 2) * k2, v + (h / 2) * l2)];
      const [k4, l4] = [v + h * l3, rate(t + h, w + h * k3, v + h * l3)];
      w += (h / 6) * (k1 + 2 * k2 + 2 * k3 + k4);
      v += (h / 6) * (l1 + 2 * l2 + 2 * l3 + l4);
    }
    const motion = movingForceMotion(mode, 2e5, 50, 0.8);
    expect(Math.abs(motion.displacementM - w)).toBeLessThan(1e-9);
    expect(Math.abs(motion.velocityMs - v)).toBeLessThan(1e-8);
  });

  it('have a limit where the force keeps time with the beam: free amplitude π/2 of the static one (beam.free_maxima at K = 1)', () => {
    const exit = movingForceMotion(beam(0), 2e5, 200, 0.1);
    const statically = (2 * 2e5) / (1e4 * 20 * (10 * Math.PI) ** 2);
    const amplitude = freeAccelerationAmplitude(beam(0), exit) / (10 * Math.PI) ** 2;
    expect(Math.abs(amplitude / statically / (Math.PI / 2) - 1)).toBeLessThan(1e-9);
  });

  it('say that nothing moves before the force comes', () => {
    expect(movingForceMotion(beam(0.01), 2e5, 50, -1)).toEqual({ displacementM: 0, velocityMs: 0, accelerationMs2: 0 });
  });

  it('take energy from a free decay all the time', () => {
    const mode = beam(0.03);
    const omega = 2 * Math.PI * 5;
    let before = Infinity;
    for (let t = 0; t < 2; t += 0.01) {
      const { displacementM, velocityMs } = freeMotion(mode, { displacementM: 1e-3, velocityMs: 0.02 }, t);
      const energy = velocityMs ** 2 + (omega * displacementM) ** 2;
      expect(energy).toBeLessThanOrEqual(before * (1 + 1e-12));
      before = energy;
    }
  });
});
