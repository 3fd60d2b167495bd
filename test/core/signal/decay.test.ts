import { describe, expect, it } from 'vitest';
import { Type } from 'typebox';
import { identifyDecay, type DecayIdentification, type DecayMode } from '../../../server/core/signal/decay.ts';
import { check, describeChecks } from '../../reference/checks.ts';
import { scipy } from '../../reference/scipy.ts';
import { available } from '../../support/debian.ts';
import { createRandom, forSeeds, noise, seedsFrom, type Random } from '../../support/random.ts';
import { decay, relative, withNoise, type TrueMode } from './signals.ts';

const mode = (hz: number, zeta: number, amplitude = 1, phase = 0.3): TrueMode => ({ hz, zeta, amplitude, phase });

/** The modes of a result, nearest first to each of the true ones. */
function matched(found: DecayIdentification, truth: readonly TrueMode[]): DecayMode[] {
  return truth.map(({ hz }) => {
    const best = [...found.modes].sort((p, q) => Math.abs(p.frequencyHz - hz) - Math.abs(q.frequencyHz - hz))[0];
    if (best === undefined) throw new Error(`no mode found near ${hz} Hz: ${reasonOf(found)}`);
    return best;
  });
}

function reasonOf(found: DecayIdentification): string {
  return found.reason ?? '';
}

function verdictOf(found: DecayIdentification): string {
  return 'verdict' in found ? found.verdict : 'none';
}

describe('decay identification on clean data', () => {
  it('finds frequency within 0.01 % and damping within 0.5 % at all rates, frequencies and dampings of bridges', () => {
    forSeeds(seedsFrom(1, 60), (random) => {
      const rate = random.pick([100, 200, 256, 500, 1000, 2000]);
      const hz = random.uniform(2, Math.min(15, rate / 10));
      const zeta = random.uniform(0.003, 0.05);
      const truth = [mode(hz, zeta, random.uniform(0.01, 5), random.uniform(-3, 3))];
      const x = decay(Math.round(random.uniform(8, 40) * (rate / hz)), rate, truth, random.uniform(-10, 10));
      const found = identifyDecay([x], rate, { expectedHz: hz * random.uniform(0.85, 1.2) });
      const [first] = matched(found, truth);
      expect(relative(first?.frequencyHz ?? NaN, hz)).toBeLessThan(1e-4);
      expect(relative(first?.dampingRatio ?? NaN, zeta)).toBeLessThan(5e-3);
      expect(verdictOf(found)).toBe('good');
    });
  });

  it('separates a weaker mode 12 % away, without being told that it is there', () => {
    forSeeds(seedsFrom(1, 20), (random) => {
      const truth = [
        mode(5.2, random.uniform(0.008, 0.02)),
        mode(5.2 * 1.12, random.uniform(0.008, 0.02), 0.3, random.uniform(-3, 3)),
      ];
      const found = identifyDecay([decay(5000, 500, truth, 1)], 500, { expectedHz: 5.2 });
      for (const [k, m] of matched(found, truth).entries()) {
        expect(relative(m.frequencyHz, truth[k]?.hz ?? NaN)).toBeLessThan(1e-4);
        expect(relative(m.dampingRatio, truth[k]?.zeta ?? NaN)).toBeLessThan(5e-3);
      }
      expect(found.modes).toHaveLength(2);
      expect(found.modes[0]?.frequencyHz).toBeCloseTo(5.2, 2);
    });
  });

  it('is not disturbed by strong modes above the band, at any of the usual rates', () => {
    for (const rate of [200, 256, 500, 1000]) {
      const truth = [mode(5, 0.013), mode(6.4, 0.015, 0.3), mode(20, 0.02, 2), mode(45, 0.02, 3, 1)];
      const found = identifyDecay([decay(6 * rate, rate, truth)], rate, { expectedHz: 5 });
      const [first] = matched(found, truth);
      expect(relative(first?.frequencyHz ?? NaN, 5)).toBeLessThan(1e-4);
      expect(relative(first?.dampingRatio ?? NaN, 0.013)).toBeLessThan(5e-3);
      expect(found.modes.every((m) => m.frequencyHz < 8)).toBe(true);
    }
  });

  it('gives amplitude and phase of each channel at the first sample, through the decimating filter', () => {
    const channels = [mode(5, 0.02, 2, 0.7), mode(5, 0.02, 0.5, -2.4), mode(5, 0.02, 1, 3)].map((m) =>
      decay(5000, 500, [m], 3),
    );
    channels.splice(1, 0, new Float64Array(5000).fill(4));
    const found = identifyDecay(channels, 500, { expectedHz: 5 });
    const first = found.modes[0];
    for (const [c, [amplitude, phase]] of [
      [2, 0.7],
      [0, 0],
      [0.5, -2.4],
      [1, 3],
    ].entries()) {
      expect(first?.amplitudes[c]).toBeCloseTo(amplitude ?? NaN, 6);
      expect(first?.phases[c]).toBeCloseTo(phase ?? NaN, 6);
    }
  });

  it('does not change when the signal is scaled, shifted in level, or its channels change places', () => {
    const random = createRandom(2);
    const a = withNoise(decay(2000, 200, [mode(5, 0.02)]), random, 0.02);
    const b = withNoise(decay(2000, 200, [mode(5, 0.02, 0.4, 2)]), random, 0.02);
    const one = identifyDecay([a, b], 200, { expectedHz: 5 }).modes[0];
    const scaled = identifyDecay(
      [a, b].map((x) => x.map((v) => 1000 * v + 7)),
      200,
      { expectedHz: 5 },
    ).modes[0];
    const swapped = identifyDecay([b, a], 200, { expectedHz: 5 }).modes[0];
    for (const other of [scaled, swapped]) {
      expect(relative(other?.frequencyHz ?? NaN, one?.frequencyHz ?? NaN)).toBeLessThan(1e-9);
      expect(relative(other?.dampingRatio ?? NaN, one?.dampingRatio ?? NaN)).toBeLessThan(1e-7);
    }
    expect(swapped?.amplitudes[1]).toBeCloseTo(one?.amplitudes[0] ?? NaN, 9);
  });

  it('is not disturbed by a base line that is a ramp as high as the motion', () => {
    const x = decay(5000, 500, [mode(5, 0.013)]).map((v, i) => v + i / 5000 - 3);
    const found = identifyDecay([x], 500, { expectedHz: 5 });
    expect(relative(found.modes[0]?.frequencyHz ?? NaN, 5)).toBeLessThan(1e-4);
    expect(relative(found.modes[0]?.dampingRatio ?? NaN, 0.013)).toBeLessThan(5e-3);
    expect(found.modes).toHaveLength(1);
  });

  it('does not depend on where in the decay the record begins', () => {
    const x = decay(4000, 200, [mode(5, 0.01)]);
    const early = identifyDecay([x.slice(0, 2000)], 200, { expectedHz: 5 }).modes[0];
    const late = identifyDecay([x.slice(700, 2700)], 200, { expectedHz: 5 }).modes[0];
    expect(relative(late?.frequencyHz ?? NaN, early?.frequencyHz ?? NaN)).toBeLessThan(1e-8);
    expect(relative(late?.dampingRatio ?? NaN, early?.dampingRatio ?? NaN)).toBeLessThan(1e-6);
    // the amplitude has fallen by e^(−ζωt) in 3.5 s
    expect((late?.amplitudes[0] ?? NaN) / (early?.amplitudes[0] ?? NaN)).toBeCloseTo(
      Math.exp(-0.01 * 2 * Math.PI * 5 * 3.5),
      6,
    );
  });

  it('finds the strongest frequency by itself, and takes a band where one is given', () => {
    const truth = [mode(3.4, 0.009, 1), mode(8.4, 0.019, 0.4)];
    const x = decay(6000, 500, truth, 0.2);
    const alone = identifyDecay([x], 500);
    expect(alone.modes[0]?.frequencyHz).toBeCloseTo(3.4, 4);
    const high = identifyDecay([x], 500, { bandHz: [7, 10] });
    expect(high.modes).toHaveLength(1);
    expect(high.modes[0]?.frequencyHz).toBeCloseTo(8.4, 3);
    expect(identifyDecay([x], 500, { bandHz: [1, 20], modes: 1 }).modes).toHaveLength(1);
  });

  it('puts the mode nearest to the expected frequency first, if it has 5 % of the strongest energy', () => {
    const near = identifyDecay([decay(5000, 500, [mode(5, 0.01, 1), mode(6.5, 0.01, 2)])], 500, { expectedHz: 5 });
    expect(near.modes[0]?.frequencyHz).toBeCloseTo(5, 3);
    const weak = identifyDecay([decay(5000, 500, [mode(5, 0.01, 0.1), mode(6.5, 0.01, 2)])], 500, { expectedHz: 5 });
    expect(weak.modes.map((m) => Math.round(10 * m.frequencyHz))).toEqual([65, 50]);
  });
});

describe('decay identification in noise', () => {
  it('uses all channels: sixteen are four times as certain as one', () => {
    const channels = (random: Random, count: number): Float64Array[] =>
      Array.from({ length: count }, () => withNoise(decay(1500, 250, [mode(5, 0.015)]), random, 0.1));
    const random = createRandom(4);
    const one = identifyDecay(channels(random, 1), 250, { expectedHz: 5 }).modes[0];
    const many = identifyDecay(channels(random, 16), 250, { expectedHz: 5 }).modes[0];
    const gain = (one?.dampingStandardError ?? NaN) / (many?.dampingStandardError ?? NaN);
    expect(gain).toBeGreaterThan(3.2);
    expect(gain).toBeLessThan(4.8);
    expect(Math.abs((many?.dampingRatio ?? NaN) - 0.015)).toBeLessThan(4 * (many?.dampingStandardError ?? NaN));
  });

  it('gives each channel its own noise and does not let a bad channel spoil the others', () => {
    const random = createRandom(5);
    const good = [0.02, 0.05].map((sigma) => withNoise(decay(3000, 500, [mode(5, 0.015)]), random, sigma));
    const bad = noise(random, 3000, 2);
    const found = identifyDecay([...good, bad], 500, { expectedHz: 5 });
    const without = identifyDecay(good, 500, { expectedHz: 5 });
    expect('noise' in found ? found.noise[0] : NaN).toBeCloseTo(0.02, 2);
    expect('noise' in found ? found.noise[1] : NaN).toBeCloseTo(0.05, 2);
    expect(relative('noise' in found ? (found.noise[2] ?? NaN) : NaN, 2)).toBeLessThan(0.15);
    const error = without.modes[0]?.frequencyStandardError ?? NaN;
    expect(Math.abs((found.modes[0]?.frequencyHz ?? NaN) - (without.modes[0]?.frequencyHz ?? NaN))).toBeLessThan(error);
  });

  it('widens its standard errors where the noise is stronger around the mode than elsewhere', () => {
    const random = createRandom(6);
    const x = decay(4000, 200, [mode(5, 0.02)]);
    const white = identifyDecay([withNoise(x, random, 0.05)], 200, { expectedHz: 5 }).modes[0];
    // noise of the same kind as ambient vibration: a heavily damped resonance at the mode's own frequency
    let y1 = 0;
    let y2 = 0;
    const coloured = x.map((v) => {
      const y = 1.9 * Math.cos((2 * Math.PI * 5) / 200) * y1 - 0.9025 * y2 + 0.01 * random.normal();
      y2 = y1;
      y1 = y;
      return v + y;
    });
    const found = identifyDecay([coloured], 200, { expectedHz: 5 }).modes[0];
    expect(found?.frequencyStandardError).toBeGreaterThan(white?.frequencyStandardError ?? NaN);
    expect(Math.abs((found?.dampingRatio ?? NaN) - 0.02)).toBeLessThan(5 * (found?.dampingStandardError ?? NaN));
  });

  it('stands a base line that wanders, and says by its standard error what that costs', () => {
    forSeeds(seedsFrom(1, 20), (random) => {
      let wander = 0;
      const x = withNoise(decay(5000, 500, [mode(5.2, 0.013)]), random, 0.01).map(
        (v) => (wander += 0.001 * random.normal()) + v,
      );
      const found = identifyDecay([x], 500, { expectedHz: 5.2 }).modes[0];
      expect(relative(found?.frequencyHz ?? NaN, 5.2)).toBeLessThan(1e-3);
      expect(relative(found?.dampingRatio ?? NaN, 0.013)).toBeLessThan(0.05);
    });
  });

  it('does not claim more than it knows where wind keeps the mode ringing', () => {
    // a mode under white force after the train has left: exact recurrence, 2 % of the decay's amplitude for ever
    const runs = 60;
    let squares = 0;
    for (let seed = 1; seed <= runs; seed++) {
      const random = createRandom(seed);
      const omega = 2 * Math.PI * 5.2;
      const fall = Math.exp((-0.013 * omega) / 200);
      const angle = (omega * Math.sqrt(1 - 0.013 ** 2)) / 200;
      const force = 0.02 * Math.sqrt((1 - fall * fall) / 2);
      let re = 1;
      let im = 0;
      const motion = Float64Array.from({ length: 2400 }, () => {
        const next = fall * (re * Math.cos(angle) - im * Math.sin(angle)) + force * random.normal();
        im = fall * (re * Math.sin(angle) + im * Math.cos(angle)) + force * random.normal();
        re = next;
        return re;
      });
      const channels = [1, 0.8, 0.5, 0.3].map((shape) =>
        withNoise(
          motion.map((v) => shape * v),
          random,
          0.002,
        ),
      );
      const found = identifyDecay(channels, 200, { expectedHz: 5.2 }).modes[0];
      squares += (((found?.dampingRatio ?? NaN) - 0.013) / (found?.dampingStandardError ?? NaN)) ** 2;
    }
    // 1 for a perfect standard error; white noise would claim one ten times too small
    expect(Math.sqrt(squares / runs)).toBeLessThan(2.5);
  });

  it('finds no mode in noise alone, in nineteen of twenty records', () => {
    const results = seedsFrom(100, 40).map((seed) =>
      identifyDecay([noise(createRandom(seed), 2000)], 200, { expectedHz: 5 }),
    );
    const invented = results.filter((found) => verdictOf(found) === 'good' || verdictOf(found) === 'usable');
    expect(invented.length).toBeLessThanOrEqual(2);
    expect(results.some((found) => found.modes.length === 0 && found.reason?.includes('stands out'))).toBe(true);
  });
});

describe('decay identification says how far it can be trusted', () => {
  it('lowers its verdict for few cycles, for uncertain damping and for what it cannot explain', () => {
    const random = createRandom(9);
    expect(verdictOf(identifyDecay([decay(400, 500, [mode(5, 0.02)])], 500, { expectedHz: 5 }))).toBe('usable');
    expect(verdictOf(identifyDecay([decay(250, 500, [mode(5, 0.02)])], 500, { expectedHz: 5 }))).toBe('poor');
    const faint = identifyDecay([withNoise(decay(3000, 500, [mode(5, 0.02)]), random, 1)], 500, { expectedHz: 5 });
    expect(['usable', 'poor']).toContain(verdictOf(faint));
    expect(reasonOf(faint)).toMatch(/uncertain|not explained/);
  });

  it('marks a motion that grows or does not decay as poor', () => {
    const found = identifyDecay([decay(2000, 200, [mode(5, -0.002)])], 200, { expectedHz: 5 });
    expect(verdictOf(found)).toBe('poor');
    expect(reasonOf(found)).toContain('does not decay');
    expect(found.modes[0]?.frequencyHz).toBeCloseTo(5, 3);
  });

  it('marks a decay whose first part is still forced', () => {
    const random = createRandom(10);
    const x = decay(3000, 200, [mode(5, 0.01)]).map(
      (v, i) => v + (i < 400 ? 0.8 * random.normal() : 0.01 * random.normal()),
    );
    const found = identifyDecay([x], 200, { expectedHz: 5 });
    expect(verdictOf(found)).not.toBe('good');
    expect(reasonOf(found)).toContain('first cycles');
  });

  it('says why there is no result', () => {
    const none = (channels: Float64Array[], options = {}): string => {
      const found = identifyDecay(channels, 100, options);
      expect(found.modes).toEqual([]);
      return reasonOf(found);
    };
    expect(none([new Float64Array(10).fill(1)])).toContain('too few');
    expect(none([new Float64Array(100)])).toContain('nothing moves');
    expect(none([new Float64Array(100).map((_, i) => (i === 5 ? NaN : i))])).toContain('not finite');
    expect(none([decay(500, 100, [mode(5, 0.02)])], { bandHz: [15, 30] })).toContain('between 15');
  });

  it('refuses what no record can answer', () => {
    const x = decay(100, 100, [mode(5, 0.02)]);
    expect(() => identifyDecay([], 100)).toThrow(RangeError);
    expect(() => identifyDecay([x, x.slice(1)], 100)).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { expectedHz: 50 })).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { expectedHz: 0 })).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { bandHz: [5, 5] })).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { bandHz: [5, 50] })).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { modes: 0 })).toThrow(RangeError);
    expect(() => identifyDecay([x], 100, { modes: 7 })).toThrow(RangeError);
  });

  it('takes anything finite without a fault: steps, spikes, ramps, squares, tiny and huge numbers', () => {
    const shapes: ((i: number) => number)[] = [
      (i) => (i < 50 ? 0 : 1),
      (i) => (i === 70 ? 1 : 0),
      (i) => i,
      (i) => (i % 20 < 10 ? 1 : -1),
      (i) => 1e-150 * Math.sin(0.3 * i),
      (i) => 1e120 * Math.sin(0.3 * i) * Math.exp(-0.01 * i),
      (i) => (i % 2 === 0 ? 1 : -1),
    ];
    for (const shape of shapes) {
      for (const n of [16, 17, 40, 333]) {
        const found = identifyDecay([Float64Array.from({ length: n }, (_, i) => shape(i))], 100, { expectedHz: 5 });
        for (const m of found.modes)
          expect(Number.isFinite(m.frequencyHz) && Number.isFinite(m.dampingRatio)).toBe(true);
        if (found.modes.length === 0) expect(reasonOf(found)).not.toBe('');
      }
    }
  });
});

describeChecks('decay identification against id.*', () => {
  const Modes = Type.Object({
    fs_Hz: Type.Number(),
    modes: Type.Array(
      Type.Object({ f_Hz: Type.Number(), zeta: Type.Number(), amp: Type.Number(), phase: Type.Number() }),
    ),
  });

  it('finds both modes of id.prony2 from its forty samples', () => {
    const { expected, inputs } = check('id.prony2', Type.Object({ y_first40: Type.Array(Type.Number()) }), Modes);
    const found = identifyDecay([Float64Array.from(expected.y_first40)], inputs.fs_Hz, { bandHz: [3, 12] });
    for (const { f_Hz, zeta, amp, phase } of inputs.modes) {
      const nearest = matched(found, [mode(f_Hz, zeta)])[0];
      expect(relative(nearest?.frequencyHz ?? NaN, f_Hz)).toBeLessThan(1e-7);
      expect(relative(nearest?.dampingRatio ?? NaN, zeta)).toBeLessThan(1e-6);
      expect(relative(nearest?.amplitudes[0] ?? NaN, amp)).toBeLessThan(1e-6);
      expect(relative(nearest?.phases[0] ?? NaN, phase)).toBeLessThan(1e-6);
    }
  });

  it('turns the ten-cycle ratios of id.logdec back into damping', () => {
    const Table = Type.Object({
      table: Type.Array(Type.Object({ zeta: Type.Number(), amp_ratio_10cycles: Type.Number() })),
    });
    const { expected } = check('id.logdec', Table);
    for (const { zeta, amp_ratio_10cycles } of expected.table) {
      const x = decay(2000, 100, [mode(5, zeta, 1, 0)]);
      const found = identifyDecay([x], 100, { expectedHz: 5 }).modes[0];
      const dampingRatio = found?.dampingRatio ?? NaN;
      const ratio = Math.exp((20 * Math.PI * dampingRatio) / Math.sqrt(1 - dampingRatio ** 2));
      expect(relative(ratio, amp_ratio_10cycles)).toBeLessThan(1e-5);
    }
  });

  const Case = Type.Object({
    A: Type.Number(),
    phase_rad: Type.Number(),
    f_n_Hz: Type.Number(),
    zeta: Type.Number(),
    fs_Hz: Type.Number(),
    n: Type.Integer(),
    sigma: Type.Number(),
    std_f_n_Hz: Type.Number(),
    std_zeta: Type.Number(),
  });

  it.each([0, 1, 2, 3, 4])(
    'comes within 15 % of the Cramér-Rao bounds of id.crb, and its standard errors within 15 % of its scatter: case %i',
    (i) => {
      const { expected } = check('id.crb', Type.Object({ cases: Type.Array(Case) }));
      const c = expected.cases[i];
      if (c === undefined) throw new Error(`id.crb has no case ${i}`);
      const random = createRandom(1000 + i);
      const clean = decay(c.n, c.fs_Hz, [mode(c.f_n_Hz, c.zeta, c.A, c.phase_rad)]);
      // 160 runs: the root mean square scatters by 6 %
      const runs = 160;
      let f = 0;
      let z = 0;
      let claimedF = 0;
      let claimedZ = 0;
      for (let run = 0; run < runs; run++) {
        const found = identifyDecay([withNoise(clean, random, c.sigma)], c.fs_Hz, { expectedHz: c.f_n_Hz }).modes[0];
        f += ((found?.frequencyHz ?? NaN) - c.f_n_Hz) ** 2;
        z += ((found?.dampingRatio ?? NaN) - c.zeta) ** 2;
        claimedF += (found?.frequencyStandardError ?? NaN) ** 2;
        claimedZ += (found?.dampingStandardError ?? NaN) ** 2;
      }
      const seed = `seed ${random.seed}`;
      expect(Math.sqrt(f / runs) / c.std_f_n_Hz, seed).toBeLessThan(1.15);
      expect(Math.sqrt(z / runs) / c.std_zeta, seed).toBeLessThan(1.15);
      expect(Math.abs(Math.sqrt(claimedF / f) - 1), seed).toBeLessThan(0.15);
      expect(Math.abs(Math.sqrt(claimedZ / z) - 1), seed).toBeLessThan(0.15);
    },
    120_000,
  );
});

describe.skipIf(!available('python3-scipy'))('decay identification against SciPy', () => {
  it('comes to the same least-squares solution and covariance as scipy.optimize.curve_fit from the truth', () => {
    const truth = [mode(5.2, 0.013), mode(5.9, 0.02, 0.4, 1)];
    const x = withNoise(decay(600, 60, truth, 0.1), createRandom(21), 0.03);
    const script = `
from scipy import optimize
x = np.array(input)
t = np.arange(len(x)) / 60
def model(t, o, d, *p):
    y = o + d * t
    for f, z, a, b in np.reshape(p, (-1, 4)):
        w = 2 * np.pi * f
        e, wd = np.exp(-z * w * t), w * np.sqrt(1 - z * z)
        y = y + e * (a * np.cos(wd * t) + b * np.sin(wd * t))
    return y
p, cov = optimize.curve_fit(model, t, x, [0.1, 0, 5.2, .013, 1, 0, 5.9, .02, .2, -.3], xtol=1e-14, ftol=1e-14)
s = np.sqrt(np.diag(cov))
output = [[p[2], p[3], s[2], s[3]], [p[6], p[7], s[6], s[7]]]
`;
    const theirs = scipy(script, x, Type.Array(Type.Array(Type.Number())));
    const found = matched(identifyDecay([x], 60, { bandHz: [3, 29] }), truth);
    for (const [k, m] of found.entries()) {
      const [f = NaN, z = NaN, sf = NaN, sz = NaN] = theirs[k] ?? [];
      expect(Math.abs(m.frequencyHz - f) / sf).toBeLessThan(1e-4);
      expect(Math.abs(m.dampingRatio - z) / sz).toBeLessThan(1e-4);
      // ours may be larger where the residuals happen to be stronger around the mode, never smaller
      expect(m.frequencyStandardError / sf).toBeGreaterThan(0.99);
      expect(m.frequencyStandardError / sf).toBeLessThan(1.4);
      expect(m.dampingStandardError / sz).toBeGreaterThan(0.99);
    }
  });
});
