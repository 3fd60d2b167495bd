import { degreesOfFreedom, DRIFT, residualsOf, type DampedFit } from './damped-fit.ts';
import {
  aboutMean,
  createGrid,
  energyOf,
  meanOf,
  MOST_MODES,
  selectModel,
  strongestHz,
  summedPower,
  unitEnergy,
  type Grid,
} from './decay-model.ts';
import type { Pole } from './pencil.ts';

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

const FEWEST_SAMPLES = 16;
/** Above this ratio a pole is a passing disturbance, not a mode of a bridge. */
const MOST_DAMPED = 0.25;
/** See `ringing`. */
const RINGING_THRESHOLD = 2.7;
/** A second mode whose damping is known less well than this is not reported: it may be a trick of the noise. */
const MOST_UNCERTAIN = 0.5;

/**
 * Natural frequencies and damping ratios from a free decay seen by one or more channels.
 *
 * Model: each channel is a straight base line plus a sum of damped cosines plus white noise; the poles are common to all
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
  const grid = createGrid(live, rateHz, band[1]);
  const best = selectModel(grid, band);
  if (best === null) return none('no damped oscillation could be fitted');
  return report(channels, live, grid, best, { rateHz, band, wanted, expectedHz: options.expectedHz });
}

function defaultBand(
  centred: readonly Float64Array[],
  rateHz: number,
  expectedHz: number | undefined,
): readonly [number, number] {
  const middle = expectedHz ?? strongestHz(centred, rateHz, null);
  const [low, high] = expectedHz === undefined ? [0.3, 3] : [0.6, 1.6];
  return [low * middle, Math.min(high * middle, 0.49 * rateHz)];
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
  const spectrum = summedPower(residuals.map(unitEnergy), 1 / grid.stepS);
  const place = channels.map((y) => live.indexOf(y));
  const modes = fit.poles
    .map((pole, k) => describe(pole, k, grid, fit, residuals, spectrum, place))
    .filter(({ mode }) => {
      const within = mode.frequencyHz >= purpose.band[0] && mode.frequencyHz <= purpose.band[1];
      return within && Math.abs(mode.dampingRatio) < MOST_DAMPED;
    });
  if (modes.length === 0) {
    return none(`no mode between ${hz(purpose.band[0])} and ${hz(purpose.band[1])} Hz stands out of the noise`);
  }
  const ordered = inOrder(modes, purpose.expectedHz)
    .filter((mode, i) => i === 0 || mode.dampingStandardError < MOST_UNCERTAIN * mode.dampingRatio)
    .slice(0, purpose.wanted);
  const residualRatio = energySum(residuals) / grid.energy.reduce((sum, e) => sum + e, 0);
  const { verdict, reasons } = judge(ordered[0]!, residualRatio, residuals, grid, seconds);
  const result = { modes: ordered, noise: noiseOf(residuals, place, grid, fit), residualRatio, verdict };
  return reasons.length === 0 ? result : { ...result, reason: reasons.join('; ') };
}

type Spectrum = ReturnType<typeof summedPower>;

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
  spectrum: Spectrum,
  place: readonly number[],
): Described {
  const { alpha, omega } = pole;
  const natural = Math.hypot(alpha, omega);
  const seconds = grid.channels[0]!.length * grid.stepS;
  const size = 2 * fit.poles.length;
  const white = whiteness(grid);
  const around = colour(spectrum, 8 / seconds, omega / (2 * Math.PI));
  const inflation = Math.max(white, around, ringing(residuals, fit, k, grid.stepS, white));
  const variance = (byAlpha: number, byOmega: number): number => {
    const a = fit.covariance[2 * k * size + 2 * k]!;
    const aw = fit.covariance[2 * k * size + 2 * k + 1]!;
    const w = fit.covariance[(2 * k + 1) * size + 2 * k + 1]!;
    return inflation * (byAlpha * byAlpha * a + 2 * byAlpha * byOmega * aw + byOmega * byOmega * w);
  };
  const [gainRe, gainIm] = filterGain(grid.taps, pole, grid.rateHz);
  const amplitudes = new Float64Array(place.length);
  const phases = new Float64Array(place.length);
  for (const [c, at] of place.entries()) {
    if (at < 0) continue;
    const re = fit.coefficients[at]![DRIFT + 2 * k]!;
    const im = -fit.coefficients[at]![DRIFT + 1 + 2 * k]!;
    amplitudes[c] = Math.hypot(re, im) / Math.hypot(gainRe, gainIm);
    phases[c] = Math.atan2(im * gainRe - re * gainIm, re * gainRe + im * gainIm);
  }
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
 * little below the level that holds around the modes: by this factor.
 */
function whiteness({ factor, taps }: Grid): number {
  return 1 / (factor * energyOf(taps));
}

/** How much stronger the residuals are within eight lines around a mode than on average. */
function colour({ power, stepHz }: Spectrum, reachHz: number, hz: number): number {
  const from = Math.max(1, Math.round((hz - reachHz) / stepHz));
  const to = Math.min(power.length - 1, Math.round((hz + reachHz) / stepHz));
  return meanOf(power.subarray(from, to + 1)) / meanOf(power);
}

/**
 * How much stronger the mode itself still rings in the residuals of the record's second half than white noise of
 * their strength would: wind and traffic keep every mode ringing in all channels together, which disturbs a decay far
 * more than the noise of the sensors. Channels are combined by the weights with which the fit looks at the mode.
 * Three lines, weighted 1 : 2 : 1; white noise passes the threshold in about one record of fifty. What
 * passes is taken for a resonance of the mode's own width, which the lines of a short record blur.
 */
function ringing(residuals: readonly Float64Array[], fit: DampedFit, k: number, stepS: number, white: number): number {
  const n = residuals[0]!.length;
  const begin = Math.floor(n / 2);
  const combinedRe = new Float64Array(n - begin);
  const combinedIm = new Float64Array(n - begin);
  let expected = 0;
  for (const [c, y] of residuals.entries()) {
    const weight = 1 / Math.max(energyOf(y), Number.MIN_VALUE);
    const re = weight * fit.coefficients[c]![DRIFT + 2 * k]!;
    const im = weight * fit.coefficients[c]![DRIFT + 1 + 2 * k]!;
    let late = 0;
    for (let i = begin; i < n; i++) {
      combinedRe[i - begin]! += re * y[i]!;
      combinedIm[i - begin]! += im * y[i]!;
      late += y[i]! * y[i]!;
    }
    expected += (re * re + im * im) * late;
  }
  const stepAngle = (2 * Math.PI) / (n - begin);
  const middle = fit.poles[k]!.omega * stepS;
  let power = 0;
  for (const [line, weight] of [
    [-1, 0.25],
    [0, 0.5],
    [1, 0.25],
  ] as const) {
    power += weight * linePower(combinedRe, combinedIm, middle + line * stepAngle);
  }
  const ratio = expected > 0 ? power / expected : 1;
  return ratio > RINGING_THRESHOLD * white ? ratio * blur(fit.poles[k]!.alpha, (n - begin) * stepS) : white;
}

/**
 * What a fit sees of a resonance of half width alpha over what three lines of a record show of it, weighted 1 : 2 : 1.
 * The fit weighs frequencies by the spectrum of t e^(−αt) and so sees 3/4 of the resonance's top, 2/α; a line at the
 * distance d from it shows 2 Re[1/s − (1 − e^(−sT)) / (s² T)] with s = α + i d (the transform of e^(−α|τ|) over T).
 */
function blur(alpha: number, seconds: number): number {
  const a = Math.max(alpha * seconds, 1e-3);
  const shown = (d: number): number => {
    const square = a * a + d * d;
    const fade = Math.exp(-a);
    const re = 1 - fade * Math.cos(d);
    const im = fade * Math.sin(d);
    return 2 * (a / square - (re * (a * a - d * d) + im * 2 * a * d) / (square * square));
  };
  return Math.max(1, 1.5 / a / (0.5 * shown(0) + 0.5 * shown(2 * Math.PI)));
}

/** |Σ (re + i im) e^(−i angle n)|² */
function linePower(re: Float64Array, im: Float64Array, angle: number): number {
  let sumRe = 0;
  let sumIm = 0;
  for (let i = 0; i < re.length; i++) {
    const cos = Math.cos(angle * i);
    const sin = Math.sin(angle * i);
    sumRe += re[i]! * cos + im[i]! * sin;
    sumIm += im[i]! * cos - re[i]! * sin;
  }
  return sumRe * sumRe + sumIm * sumIm;
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
  const free = degreesOfFreedom(grid.channels[0]!.length, fit.poles.length, residuals.length);
  const gain = energyOf(grid.taps);
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

function energySum(records: readonly Float64Array[]): number {
  return records.reduce((sum, y) => sum + energyOf(y), 0);
}
