import { fitDamped, type DampedFit, type FitData } from './damped-fit.ts';
import { decimate, decimationLoss, type Decimated } from './decimate.ts';
import { createRealTransform, powerOfTwoFrom } from './fourier.ts';
import { shiftPoles, signalSubspace, type Pole } from './pencil.ts';

export interface DecayOptions {
  /** About where the wanted mode is, Hz; it comes first in the result. */
  expectedHz?: number;
  /** Frequencies wanted, Hz. Default 0.6 to 1.6 times `expectedHz`, else 0.3 to 3 times the strongest frequency. */
  bandHz?: readonly [number, number];
  /** How many modes to report at most, 1 to 6. Default 3. More may be fitted so that they disturb nothing. */
  modes?: number;
}

export interface DecayMode {
  /** Undamped natural frequency, Hz. */
  frequencyHz: number;
  /** Ratio to critical damping, 1 = critical. */
  dampingRatio: number;
  frequencyStandardError: number;
  dampingStandardError: number;
  /** Amplitude of each channel at the first sample, in the unit of the samples. */
  amplitudes: Float64Array;
  /** Phase of each channel at the first sample, rad: amplitude × cos(phase). */
  phases: Float64Array;
}

export type DecayIdentification =
  | {
      modes: DecayMode[];
      /** Standard deviation of white noise at the given rate that would leave these residuals, for each channel. */
      noise: Float64Array;
      /** Share of the energy below the upper edge of the band that the model does not explain, 0 to 1. */
      residualRatio: number;
      verdict: 'good' | 'usable' | 'poor';
      /** Why the verdict is less than good. */
      reason?: string;
    }
  | { modes: []; reason: string };

const MOST_MODES = 6;
const FEWEST_SAMPLES = 16;
/** Above this ratio a pole is a passing disturbance, not a mode of a bridge. */
const MOST_DAMPED = 0.25;
/** Part of the record that the decimating filter may take from its end. */
const TOLERATED_LOSS = 0.04;
/** Samples for each cycle of the highest wanted frequency when looking for start values. */
const START_OVERSAMPLING = 4;

/**
 * Natural frequencies and damping ratios from a free decay seen by one or more channels.
 *
 * Model: each channel is a constant plus a sum of damped cosines plus white noise; the poles are common to all
 * channels. Start values come from the shift-invariant signal subspace, the number of modes from Schwarz's
 * criterion, final values by maximum likelihood with a noise level for each channel, standard errors from the
 * Fisher information. The record must begin after the load has left; it may end in noise.
 *
 * @param channels equally long records of one clock; all-zero channels get amplitude 0
 * @param rateHz samples per second
 * @returns modes strongest first (with `expectedHz`: nearest first among those with 5 % of the strongest energy), or
 *   no modes and the reason: too short, not finite, no oscillation in the band
 * @throws RangeError where channels differ in length or options are outside their ranges
 * @example
 * const y = Float64Array.from({ length: 1000 }, (_, i) => Math.exp(-0.02 * 31.416 * i / 100) * Math.cos(31.41 * i / 100));
 * identifyDecay([y], 100).modes[0]?.dampingRatio // 0.0200
 */
export function identifyDecay(
  channels: readonly Float64Array[],
  rateHz: number,
  options: DecayOptions = {},
): DecayIdentification {
  const wanted = options.modes ?? 3;
  checkArguments(channels, rateHz, wanted, options);
  const n = channels[0]!.length;
  if (n < FEWEST_SAMPLES) return none(`${n} samples are too few, ${FEWEST_SAMPLES} are needed`);
  if (!channels.every((y) => y.every(Number.isFinite))) return none('some samples are not finite numbers');
  const centred = channels.map(aboutMean);
  const live = channels.filter((_, c) => energyOf(centred[c]!) > 0);
  if (live.length === 0) return none('nothing moves: all channels are constant');

  const band = options.bandHz ?? defaultBand(centred, rateHz, options.expectedHz);
  const grid = refiningGrid(live, rateHz, band[1]);
  const best = selectModel(grid, startPoles(live, rateHz, band), band);
  if (best === null) return none('no damped oscillation could be fitted');
  return report(channels, live, grid, best, { rateHz, band, wanted, expectedHz: options.expectedHz });
}

interface Grid extends FitData {
  decimation: Decimated[];
  rateHz: number;
}

/** Low-passed and decimated so that the fit is cheap, but not so far that the filter eats the end of the record. */
function refiningGrid(live: readonly Float64Array[], rateHz: number, upToHz: number): Grid {
  const seconds = live[0]!.length / rateHz;
  let factor = startFactor(live[0]!.length, rateHz, upToHz);
  while (factor > 1 && decimationLoss(upToHz, rateHz, factor) > TOLERATED_LOSS * seconds) factor--;
  const decimation = live.map((y) => decimate(y, factor, upToHz, rateHz));
  const kept = decimation.map(({ samples }) => samples);
  return {
    decimation,
    channels: kept,
    energy: Float64Array.from(kept, (y) => Math.max(energyOf(aboutMean(y)), Number.MIN_VALUE)),
    stepS: factor / rateHz,
    rateHz,
  };
}

function startFactor(n: number, rateHz: number, upToHz: number): number {
  let factor = Math.max(1, Math.floor(rateHz / (START_OVERSAMPLING * upToHz)));
  while (factor > 1 && n / factor - decimationLoss(upToHz, rateHz, factor) * (rateHz / factor) < 2 * FEWEST_SAMPLES)
    factor--;
  return factor;
}

/** Candidate sets of poles, one for each assumed size of the signal subspace. */
function startPoles(live: readonly Float64Array[], rateHz: number, band: readonly [number, number]): Pole[][] {
  const factor = startFactor(live[0]!.length, rateHz, band[1]);
  const stepS = factor / rateHz;
  const records = live.map((y) => {
    const record = aboutMean(decimate(y, factor, band[1], rateHz).samples);
    const scale = 1 / Math.sqrt(energyOf(record) || 1);
    return record.map((v) => v * scale);
  });
  const subspace = signalSubspace(records, stepS);
  const sets: Pole[][] = [];
  const largest = Math.min(2 * MOST_MODES, subspace.vectors.rows - 1);
  for (let rank = 2; rank <= largest; rank++) {
    const poles = shiftPoles(subspace, rank).map(tamed);
    if (poles.length > 0 && distinct(poles, records[0]!.length * stepS)) sets.push(poles);
  }
  return sets;
}

/** Noise may put a start value on the growing side; the fit then begins from light damping. */
function tamed({ alpha, omega }: Pole): Pole {
  return { alpha: Math.min(Math.max(alpha, 1e-3 * omega), omega), omega };
}

/**
 * Two poles nearer than their own widths, or than half a cycle over the record, cannot be told from one mode whose
 * frequency drifts as it decays, which is how a ballasted deck behaves.
 */
function distinct(poles: readonly Pole[], seconds: number): boolean {
  const sorted = [...poles].sort((p, q) => p.omega - q.omega);
  return sorted.every((pole, i) => {
    const before = sorted[i - 1];
    return before === undefined || pole.omega - before.omega > pole.alpha + before.alpha + Math.PI / seconds;
  });
}

/** The number of modes that Schwarz's criterion prefers (1978), then more as long as the residuals hold one. */
function selectModel(grid: Grid, sets: readonly Pole[][], band: readonly [number, number]): DampedFit | null {
  const seconds = grid.channels[0]!.length * grid.stepS;
  let best: DampedFit | null = null;
  let bestScore = Infinity;
  const consider = (poles: readonly Pole[]): boolean => {
    const fit = fitDamped(grid, poles, 10);
    if (fit === null || !distinct(fit.poles, seconds)) return false;
    const score =
      fit.deviance + unknowns(grid, fit.poles.length) * Math.log(grid.channels[0]!.length * grid.channels.length);
    if (!(score < bestScore)) return false;
    best = fit;
    bestScore = score;
    return true;
  };
  let refused = 0;
  for (const poles of sets) {
    if (consider(poles)) refused = 0;
    else if (++refused > 4 && best !== null) break;
  }
  for (;;) {
    const poles: readonly Pole[] = (best as DampedFit | null)?.poles ?? [];
    if (poles.length >= MOST_MODES) break;
    if (!consider([...poles, strongestPole(remaining(grid, best), grid.stepS, poles.length === 0 ? band : null)]))
      break;
  }
  return best === null ? null : fitDamped(grid, (best as DampedFit).poles, 40);
}

function unknowns({ channels }: Grid, modes: number): number {
  return 2 * modes + channels.length * (2 * modes + 1);
}

/** What the model leaves of each channel, scaled to unit energy so that loud channels do not hide quiet ones. */
function remaining(grid: Grid, fit: DampedFit | null): Float64Array[] {
  return (fit === null ? grid.channels.map(aboutMean) : residualsOf(grid, fit)).map((y) => {
    const scale = 1 / Math.sqrt(energyOf(y) || 1);
    return y.map((v) => v * scale);
  });
}

function strongestPole(records: readonly Float64Array[], stepS: number, band: readonly [number, number] | null): Pole {
  const { power, stepHz } = summedPower(records, 1 / stepS);
  const hz = strongestHz(power, stepHz, band);
  const omega = 2 * Math.PI * hz;
  return { omega, alpha: Math.max(0.01 * omega, 2 / (records[0]!.length * stepS)) };
}

/** Sum of the channels' periodograms, zero-padded to at least twice their length. */
function summedPower(records: readonly Float64Array[], rateHz: number): { power: Float64Array; stepHz: number } {
  const size = Math.max(8, powerOfTwoFrom(2 * records[0]!.length));
  const transform = createRealTransform(size);
  const padded = new Float64Array(size);
  const re = new Float64Array(size / 2 + 1);
  const im = new Float64Array(size / 2 + 1);
  const power = new Float64Array(size / 2 + 1);
  for (const y of records) {
    padded.fill(0);
    padded.set(y);
    transform.forward(padded, re, im);
    for (let k = 0; k < power.length; k++) power[k]! += re[k]! * re[k]! + im[k]! * im[k]!;
  }
  return { power, stepHz: rateHz / size };
}

function strongestHz(power: Float64Array, stepHz: number, band: readonly [number, number] | null): number {
  const from = Math.max(2, band === null ? 2 : Math.floor(band[0] / stepHz));
  const to = Math.min(power.length - 2, band === null ? power.length - 2 : Math.ceil(band[1] / stepHz));
  let at = Math.min(from, power.length - 2);
  for (let k = at; k <= to; k++) if (power[k]! > power[at]!) at = k;
  return at * stepHz;
}

function defaultBand(
  centred: readonly Float64Array[],
  rateHz: number,
  expectedHz: number | undefined,
): readonly [number, number] {
  const around = expectedHz ?? null;
  const [low, high] = around === null ? [0.3, 3] : [0.6, 1.6];
  const middle = around ?? strongestFrequency(centred, rateHz);
  return [low * middle, Math.min(high * middle, 0.49 * rateHz)];
}

function strongestFrequency(records: readonly Float64Array[], rateHz: number): number {
  const { power, stepHz } = summedPower(records, rateHz);
  return strongestHz(power, stepHz, null);
}

interface Purpose {
  rateHz: number;
  band: readonly [number, number];
  wanted: number;
  expectedHz: number | undefined;
}

function report(
  channels: readonly Float64Array[],
  live: readonly Float64Array[],
  grid: Grid,
  fit: DampedFit,
  purpose: Purpose,
): DecayIdentification {
  const seconds = live[0]!.length / purpose.rateHz;
  const residuals = residualsOf(grid, fit);
  const place = channels.map((y) => live.indexOf(y));
  const modes = fit.poles
    .map((pole, k) => describe(pole, k, grid, fit, residuals, place))
    .filter(({ mode }) => {
      const within = mode.frequencyHz >= purpose.band[0] && mode.frequencyHz <= purpose.band[1];
      return within && Math.abs(mode.dampingRatio) < MOST_DAMPED;
    });
  if (modes.length === 0) {
    return none(`no mode between ${hz(purpose.band[0])} and ${hz(purpose.band[1])} Hz stands out of the noise`);
  }
  const ordered = inOrder(modes, purpose.expectedHz).slice(0, purpose.wanted);
  const residualRatio = energySum(residuals) / grid.energy.reduce((sum, e) => sum + e, 0);
  const { verdict, reasons } = judge(ordered[0]!, residualRatio, residuals, grid, seconds);
  const result = { modes: ordered, noise: noiseOf(residuals, place, grid, fit), residualRatio, verdict };
  return reasons.length === 0 ? result : { ...result, reason: reasons.join('; ') };
}

interface Described {
  mode: DecayMode;
  energy: number;
}

function describe(
  pole: Pole,
  k: number,
  grid: Grid,
  fit: DampedFit,
  residuals: readonly Float64Array[],
  place: readonly number[],
): Described {
  const { alpha, omega } = pole;
  const natural = Math.hypot(alpha, omega);
  const inflation = whiteness(grid) * colour(residuals, omega / (2 * Math.PI), grid.stepS);
  const variance = (byAlpha: number, byOmega: number): number => {
    const a = fit.covariance.get(2 * k, 2 * k);
    const w = fit.covariance.get(2 * k + 1, 2 * k + 1);
    const aw = fit.covariance.get(2 * k, 2 * k + 1);
    return inflation * (byAlpha * byAlpha * a + 2 * byAlpha * byOmega * aw + byOmega * byOmega * w);
  };
  const [gainRe, gainIm] = filterGain(grid.decimation[0]!.taps, pole, grid.rateHz);
  const amplitudes = new Float64Array(place.length);
  const phases = new Float64Array(place.length);
  for (const [c, at] of place.entries()) {
    if (at < 0) continue;
    const re = fit.coefficients[at]![1 + 2 * k]!;
    const im = -fit.coefficients[at]![2 + 2 * k]!;
    amplitudes[c] = Math.hypot(re, im) / Math.hypot(gainRe, gainIm);
    phases[c] = Math.atan2(im * gainRe - re * gainIm, re * gainRe + im * gainIm);
  }
  const seconds = grid.channels[0]!.length * grid.stepS;
  const lasting = alpha > 0 ? -Math.expm1(-2 * alpha * seconds) / (2 * alpha) : seconds;
  return {
    mode: {
      frequencyHz: natural / (2 * Math.PI),
      dampingRatio: alpha / natural,
      frequencyStandardError: Math.sqrt(variance(alpha, omega)) / natural / (2 * Math.PI),
      dampingStandardError: Math.sqrt(variance(omega * omega, -alpha * omega)) / natural ** 3,
      amplitudes,
      phases,
    },
    energy: energyOf(amplitudes) * lasting,
  };
}

/** The complex gain that the decimating filter had for an exponential of this pole. */
function filterGain(taps: Float64Array, { alpha, omega }: Pole, rateHz: number): [number, number] {
  let re = 0;
  let im = 0;
  for (let j = 0; j < taps.length; j++) {
    const grown = taps[j]! * Math.exp((-alpha * j) / rateHz);
    re += grown * Math.cos((omega * j) / rateHz);
    im += grown * Math.sin((omega * j) / rateHz);
  }
  return [re, im];
}

/**
 * White noise loses some power in the transition band of the decimating filter, so the residuals' variance is a
 * little below the level that holds around the modes.
 */
function whiteness({ decimation }: Grid): number {
  const { factor, taps } = decimation[0]!;
  return 1 / (factor * energyOf(taps));
}

/** How much stronger the residuals are within eight lines around a mode than on average; 1 for white noise. */
function colour(residuals: readonly Float64Array[], hz: number, stepS: number): number {
  const scaled = residuals.map((y) => {
    const scale = 1 / Math.sqrt(energyOf(y) || 1);
    return y.map((v) => v * scale);
  });
  const { power, stepHz } = summedPower(scaled, 1 / stepS);
  const reach = 8 / (residuals[0]!.length * stepS);
  const from = Math.max(1, Math.round((hz - reach) / stepHz));
  const to = Math.min(power.length - 1, Math.round((hz + reach) / stepHz));
  return Math.max(1, meanOf(power.subarray(from, to + 1)) / meanOf(power));
}

function inOrder(modes: Described[], expectedHz: number | undefined): DecayMode[] {
  const byEnergy = [...modes].sort((p, q) => q.energy - p.energy);
  if (expectedHz === undefined) return byEnergy.map(({ mode }) => mode);
  const strongest = byEnergy[0]!.energy;
  const distance = ({ mode }: Described): number => Math.abs(Math.log(mode.frequencyHz / expectedHz));
  const notable = byEnergy.filter(({ energy }) => energy >= 0.05 * strongest).sort((p, q) => distance(p) - distance(q));
  return [...notable, ...byEnergy.slice(notable.length)].map(({ mode }) => mode);
}

function noiseOf(
  residuals: readonly Float64Array[],
  place: readonly number[],
  grid: Grid,
  fit: DampedFit,
): Float64Array {
  const n = grid.channels[0]!.length;
  const modes = fit.poles.length;
  const free = n - (2 * modes + 1) - (2 * modes) / residuals.length;
  const gain = energyOf(grid.decimation[0]!.taps);
  return Float64Array.from(place, (at) => (at < 0 ? 0 : Math.sqrt(energyOf(residuals[at]!) / free / gain)));
}

/** Reasons to trust a result less; the limits are this program's own choice. */
function judge(
  first: DecayMode,
  residualRatio: number,
  residuals: readonly Float64Array[],
  grid: Grid,
  seconds: number,
): { verdict: 'good' | 'usable' | 'poor'; reasons: string[] } {
  let verdict: 'good' | 'usable' | 'poor' = 'good';
  const reasons: string[] = [];
  const lower = (to: 'usable' | 'poor', reason: string): void => {
    if (verdict !== 'poor') verdict = to;
    reasons.push(reason);
  };
  const cycles = first.frequencyHz * seconds;
  if (cycles < 5) lower(cycles < 3 ? 'poor' : 'usable', `only ${cycles.toFixed(1)} cycles`);
  if (first.dampingRatio <= 0) lower('poor', 'the oscillation does not decay');
  else {
    const relative = first.dampingStandardError / first.dampingRatio;
    if (relative > 0.1) lower(relative > 0.3 ? 'poor' : 'usable', `damping uncertain by ${percent(relative)}`);
  }
  if (residualRatio > 0.2) {
    lower(residualRatio > 0.5 ? 'poor' : 'usable', `${percent(residualRatio)} of the energy is not explained`);
  }
  if (residualRatio > 1e-3) {
    const misfit = earlyMisfit(residuals, grid.channels);
    if (misfit > 0.02) lower(misfit > 0.2 ? 'poor' : 'usable', 'the first cycles do not follow the model');
  }
  return { verdict, reasons };
}

/**
 * Share of the first quarter's energy by which its residuals exceed those of the last quarter: noise stays, a wrong
 * model (load still on the bridge, stiffness that depends on amplitude) fades with the motion.
 */
function earlyMisfit(residuals: readonly Float64Array[], channels: readonly Float64Array[]): number {
  const quarter = Math.floor(residuals[0]!.length / 4);
  const early = energySum(residuals.map((y) => y.subarray(0, quarter)));
  const late = energySum(residuals.map((y) => y.subarray(y.length - quarter)));
  const motion = energySum(channels.map((y) => aboutMean(y.subarray(0, quarter))));
  return early > 3 * late ? (early - late) / motion : 0;
}

function residualsOf(grid: Grid, fit: DampedFit): Float64Array[] {
  return grid.channels.map((y, c) => {
    const a = fit.coefficients[c]!;
    const left = y.map((v) => v - a[0]!);
    for (const [k, { alpha, omega }] of fit.poles.entries())
      subtractOscillation(left, a[1 + 2 * k]!, a[2 + 2 * k]!, alpha, omega, grid.stepS);
    return left;
  });
}

function subtractOscillation(
  y: Float64Array,
  cosine: number,
  sine: number,
  alpha: number,
  omega: number,
  stepS: number,
): void {
  const decay = Math.exp(-alpha * stepS);
  const stepRe = decay * Math.cos(omega * stepS);
  const stepIm = decay * Math.sin(omega * stepS);
  let re = cosine;
  let im = -sine;
  for (let i = 0; i < y.length; i++) {
    y[i]! -= re;
    const next = re * stepRe - im * stepIm;
    im = re * stepIm + im * stepRe;
    re = next;
  }
}

function checkArguments(
  channels: readonly Float64Array[],
  rateHz: number,
  wanted: number,
  { expectedHz, bandHz }: DecayOptions,
): void {
  if (channels.length === 0) throw new RangeError('no channels');
  if (channels.some((y) => y.length !== channels[0]!.length)) throw new RangeError('channels differ in length');
  if (!(wanted >= 1 && wanted <= MOST_MODES)) throw new RangeError(`${wanted} modes: not from 1 to ${MOST_MODES}`);
  if (expectedHz !== undefined && !(expectedHz > 0 && expectedHz < rateHz / 2)) {
    throw new RangeError(`expected ${expectedHz} Hz is not between 0 and half the rate of ${rateHz} Hz`);
  }
  if (bandHz !== undefined && !(bandHz[0] >= 0 && bandHz[0] < bandHz[1] && bandHz[1] < rateHz / 2)) {
    throw new RangeError(`band ${bandHz[0]} to ${bandHz[1]} Hz is not within 0 and half the rate of ${rateHz} Hz`);
  }
}

const none = (reason: string): DecayIdentification => ({ modes: [], reason });
const hz = (value: number): string => value.toPrecision(3);
const percent = (share: number): string => `${Math.round(100 * share)} %`;

function meanOf(x: Float64Array): number {
  let sum = 0;
  for (const v of x) sum += v;
  return sum / x.length;
}

function aboutMean(x: Float64Array): Float64Array {
  const mean = meanOf(x);
  return x.map((v) => v - mean);
}

function energyOf(x: Float64Array): number {
  let sum = 0;
  for (const v of x) sum += v * v;
  return sum;
}

function energySum(records: readonly Float64Array[]): number {
  return records.reduce((sum, y) => sum + energyOf(y), 0);
}
