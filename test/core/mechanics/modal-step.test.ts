import { Type } from 'typebox';
import { describe, expect, it } from 'vitest';
import { accelerationAmplitude, createOscillators, run, tune, tuneToAmplitude } from '#core/mechanics/modal-step.ts';
import { movingForceMotion } from '#core/mechanics/moving-force.ts';
import { check, describeChecks } from '../../reference/checks.ts';

const omega = 2 * Math.PI * 5;

function oscillator(zeta: number, stepS: number) {
  const one = createOscillators(1);
  tune(one, 0, zeta * omega, omega * Math.sqrt(1 - zeta * zeta), stepS);
  return one;
}

describe('the exact step of one oscillator', () => {
  it('follows the closed form of a moving force; what is left is the straight line between force samples', () => {
    const error = (stepS: number): number => {
      const steps = Math.round(1 / stepS);
      const force = Float64Array.from({ length: steps + 1 }, (_, i) =>
        i * stepS <= 0.4 ? 2 * Math.sin((Math.PI * 50 * i * stepS) / 20) : 0,
      );
      const acceleration = new Float64Array(steps + 1);
      run(oscillator(0.01, stepS), 0, force, 0, steps, acceleration);
      let most = 0;
      for (let i = 1; i < steps; i++) {
        const mode = { lengthM: 20, massPerMetreKg: 1e4, order: 1, frequencyHz: 5, zeta: 0.01 };
        const wanted = movingForceMotion(mode, 2e5, 50, i * stepS).accelerationMs2;
        most = Math.max(most, Math.abs(acceleration[i]! - wanted));
      }
      return most;
    };
    // Linear interpolation of a half sine of 0.4 s: error of order h² · F Ω² / 8, below 2e-5 of 2 m/s² at 1 ms.
    expect(error(1e-3)).toBeLessThan(1e-4);
    expect(error(5e-4)).toBeLessThan(error(1e-3) / 3);
  });

  it('is as exact in steps so small that differences of near equal numbers would spoil it', () => {
    // A constant force of 1 m/s² settles at F/ω² about which it swings: w = (1 − cos ωt) / ω² without damping.
    const stepS = 1e-5;
    const steps = 20_000;
    const displacement = new Float64Array(steps + 1);
    run(
      oscillator(0, stepS),
      0,
      new Float64Array(steps + 1).fill(1),
      0,
      steps,
      new Float64Array(steps + 1),
      displacement,
    );
    const wanted = (1 - Math.cos(omega * steps * stepS)) / omega ** 2;
    expect(Math.abs(displacement[steps]! - wanted)).toBeLessThan(1e-10 * (2 / omega ** 2) + 1e-15);
    const half = steps / 2;
    expect(Math.abs(displacement[half]! * omega ** 2 - (1 - Math.cos(omega * half * stepS)))).toBeLessThan(1e-9);
  });

  it('keeps the frequency that average acceleration in 5 ms steps would shift by 0.2 % (sim.newmark)', () => {
    // 25 s of 5 Hz are 125 whole cycles; average acceleration would be a quarter of a cycle behind by then.
    const steps = 5000;
    const one = oscillator(0, 0.005);
    one.re[0] = 0.001;
    run(one, 0, new Float64Array(steps + 1), 0, steps, new Float64Array(steps + 1));
    expect(Math.abs(one.re[0] - 0.001)).toBeLessThan(1e-12);
    expect(Math.abs(one.im[0]!)).toBeLessThan(1e-12);
  });
});

describeChecks('amplitude-dependent decay (id.ampdecay)', () => {
  it('has the closed form of amplitude over time', () => {
    const { expected } = check(
      'id.ampdecay',
      Type.Object({
        z0: Type.Number(),
        z1_per_unit_amp: Type.Number(),
        samples: Type.Array(Type.Object({ t_s: Type.Number(), A: Type.Number() })),
      }),
    );
    const stepS = 5e-4;
    const stretch = 10;
    const law = { f0Hz: 5, fallHz: 0, z0: expected.z0, rise: expected.z1_per_unit_amp };
    const one = createOscillators(1);
    tune(one, 0, law.z0 * omega, omega, stepS);
    one.im[0] = 1 / omega ** 2;
    const still = new Float64Array(stretch + 1);
    const scale = accelerationAmplitude(one, 0, 0);
    one.im[0] = one.im[0] / scale;
    let t = 0;
    for (const { t_s, A } of expected.samples) {
      while (t < t_s - 1e-9) {
        tuneToAmplitude(one, 0, law, 0, stepS, stretch * stepS);
        run(one, 0, still, 0, stretch, new Float64Array(stretch + 1));
        t += stretch * stepS;
      }
      // The tolerance of the sheet is for the formula; steps of 5 ms with the amplitude of their middle are good to 1e-3.
      expect(Math.abs(accelerationAmplitude(one, 0, 0) / A - 1), `at ${t_s} s`).toBeLessThan(2e-3);
    }
  });
});
