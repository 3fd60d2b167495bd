import { EigenvalueDecomposition, Matrix } from 'ml-matrix';
import { DRIFT, fitDamped, residualsOf, type DampedFit, type FitData } from './damped-fit.ts';
import { decimate, decimationLoss } from './decimate.ts';
import { createRealTransform, powerOfTwoFrom } from './fourier.ts';
import { shiftPoles, signalSubspace, type Pole } from './pencil.ts';

/** The records as they are fitted: about their mean, low-passed and decimated. */
export interface Grid extends FitData {
  /** Filter of the decimation, looking forwards, on the original samples. */
  taps: Float64Array;
  factor: number;
  rateHz: number;
}

export const MOST_MODES = 6;
const FEWEST_SAMPLES = 32;
/** Part of the record that the decimating filter may take. */
const TOLERATED_LOSS = 0.04;
/**
 * Samples kept for each cycle of the highest wanted frequency. The filter blurs the strong beginning of a decay by
 * half its length; at 8 that costs under 2 % of the accuracy for a mode of 2 % damping.
 */
const OVERSAMPLING = 8;
/** A channel may move only above the band; then next to nothing is left of it, but never exactly nothing. */
const LEAST_ENERGY = 1e-280;
/** Combinations of channels that take part in choosing the model. */
const PRINCIPAL = 4;

/** Makes the grid of a fit up to the given frequency. Every channel must move. */
export function createGrid(live: readonly Float64Array[], rateHz: number, upToHz: number): Grid {
  const n = live[0]!.length;
  const tooFar = (factor: number): boolean => {
    const lost = decimationLoss(upToHz, rateHz, factor) * rateHz;
    return lost > TOLERATED_LOSS * n || (n - lost) / factor < FEWEST_SAMPLES;
  };
  let factor = Math.max(1, Math.floor(rateHz / (OVERSAMPLING * upToHz)));
  while (factor > 1 && tooFar(factor)) factor--;
  const decimated = live.map((y) => decimate(y, factor, upToHz, rateHz));
  const channels = decimated.map(({ samples }) => aboutMean(samples));
  const energy = Float64Array.from(channels, (y) => Math.max(energyOf(y), LEAST_ENERGY));
  return { channels, energy, stepS: factor / rateHz, taps: decimated[0]!.taps, factor, rateHz };
}

/**
 * The best model of a grid. First the number of modes in the band that Schwarz's criterion (1978) prefers, among
 * starts from signal subspaces of every size and on a coarser grid; then one more at the strongest line of the
 * residuals as long as the criterion agrees; all on the strongest combinations of channels. Last a fit to all.
 *
 * @returns null where nothing could be fitted
 */
export function selectModel(grid: Grid, band: readonly [number, number]): DampedFit | null {
  const principal = principalData(grid);
  const coarse = coarser(principal, band[1]);
  const first = createChoice(coarse);
  let refused = 0;
  for (const poles of startPoles(coarse, band[1])) {
    if (first.consider(poles)) refused = 0;
    else if (++refused > 4 && first.best !== null) break;
  }
  const choice = createChoice(principal);
  if (first.best !== null) choice.consider(first.best.poles);
  while ((choice.best?.poles.length ?? 0) < MOST_MODES) {
    const poles = choice.best?.poles ?? [];
    const records = (choice.best === null ? principal.channels : residualsOf(principal, choice.best)).map(unitEnergy);
    if (!choice.consider([...poles, strongestPole(records, grid.stepS, poles.length === 0 ? band : null)])) break;
  }
  return choice.best === null ? null : fitDamped(grid, choice.best.poles, { steps: 60, enough: 0 });
}

/** Sum of the channels' periodograms, zero-padded to at least twice their length. */
export function summedPower(records: readonly Float64Array[], rateHz: number): { power: Float64Array; stepHz: number } {
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

/** Frequency of the strongest line of all channels together; of the lines in the band where one is given. */
export function strongestHz(
  records: readonly Float64Array[],
  rateHz: number,
  band: readonly [number, number] | null,
): number {
  const { power, stepHz } = summedPower(records, rateHz);
  const end = power.length - 2;
  const from = Math.min(end, Math.max(2, band === null ? 2 : Math.floor(band[0] / stepHz)));
  const to = Math.min(end, band === null ? end : Math.ceil(band[1] / stepHz));
  let at = from;
  for (let k = from; k <= to; k++) if (power[k]! > power[at]!) at = k;
  return at * stepHz;
}

export function meanOf(x: Float64Array): number {
  let sum = 0;
  for (let i = 0; i < x.length; i++) sum += x[i]!;
  return sum / x.length;
}

export function aboutMean(x: Float64Array): Float64Array {
  const mean = meanOf(x);
  const left = new Float64Array(x.length);
  for (let i = 0; i < x.length; i++) left[i] = x[i]! - mean;
  return left;
}

export function energyOf(x: Float64Array): number {
  let sum = 0;
  for (let i = 0; i < x.length; i++) sum += x[i]! * x[i]!;
  return sum;
}

/** Scaled so that loud channels do not hide quiet ones. */
export function unitEnergy(x: Float64Array): Float64Array {
  const scale = 1 / Math.sqrt(energyOf(x) || 1);
  const scaled = new Float64Array(x.length);
  for (let i = 0; i < x.length; i++) scaled[i] = x[i]! * scale;
  return scaled;
}

interface Choice {
  best: DampedFit | null;
  /** True where the fit from these poles is the best so far. */
  consider(poles: readonly Pole[]): boolean;
}

function createChoice(data: FitData): Choice {
  const n = data.channels[0]!.length;
  const channels = data.channels.length;
  let bestScore = Infinity;
  const choice: Choice = {
    best: null,
    consider(poles) {
      const fit = fitDamped(data, poles, { steps: 12, enough: 0.1 });
      if (fit === null || !distinct(fit.poles, n * data.stepS)) return false;
      const modes = fit.poles.length;
      const unknowns = 2 * modes + channels * (2 * modes + DRIFT);
      const score = fit.deviance + unknowns * Math.log(n * channels);
      if (!(score < bestScore)) return false;
      choice.best = fit;
      bestScore = score;
      return true;
    },
  };
  return choice;
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

/**
 * The strongest orthogonal combinations of the channels, each channel first scaled by its noise, for which the last
 * quarter of the record stands.
 */
function principalData(grid: Grid): FitData {
  const count = grid.channels.length;
  if (count <= PRINCIPAL) return grid;
  const n = grid.channels[0]!.length;
  const scaled = grid.channels.map((y, c) => {
    const late = y.subarray(n - Math.floor(n / 4));
    const noise = Math.sqrt(Math.max(energyOf(late) / late.length, (1e-8 * grid.energy[c]!) / n));
    return y.map((v) => v / noise);
  });
  const covariance = Matrix.zeros(count, count);
  for (let i = 0; i < count; i++) {
    for (let j = i; j < count; j++) {
      let product = 0;
      for (let m = 0; m < n; m++) product += scaled[i]![m]! * scaled[j]![m]!;
      covariance.set(i, j, product);
      covariance.set(j, i, product);
    }
  }
  // ml-matrix gives rising eigenvalues
  const vectors = new EigenvalueDecomposition(covariance, { assumeSymmetric: true }).eigenvectorMatrix;
  const channels = Array.from({ length: PRINCIPAL }, (_, p) => {
    const combined = new Float64Array(n);
    for (let c = 0; c < count; c++) {
      const share = vectors.get(c, count - 1 - p);
      const y = scaled[c]!;
      for (let m = 0; m < n; m++) combined[m]! += share * y[m]!;
    }
    return combined;
  }).filter((y) => energyOf(y) > 0);
  return { channels, energy: Float64Array.from(channels, energyOf), stepS: grid.stepS };
}

/** Half as many samples, where enough are left. Only what lies below `upToHz` is free of aliases. */
function coarser({ channels, energy, stepS }: FitData, upToHz: number): FitData {
  const factor = Math.floor(1 / (stepS * 0.5 * OVERSAMPLING * upToHz));
  if (factor <= 1 || channels[0]!.length / factor < 4 * FEWEST_SAMPLES) return { channels, energy, stepS };
  const records = channels.map((y) => aboutMean(decimate(y, factor, upToHz, 1 / stepS).samples));
  return {
    channels: records,
    energy: Float64Array.from(records, (y) => Math.max(energyOf(y), LEAST_ENERGY)),
    stepS: factor * stepS,
  };
}

/** Candidate sets of poles below `upToHz`, one for each assumed size of the signal subspace; no set twice. */
function startPoles({ channels, stepS }: FitData, upToHz: number): Pole[][] {
  const subspace = signalSubspace(channels.map(unitEnergy), stepS, 2 * MOST_MODES);
  // less than a cycle in the record is drift
  const slowest = (2 * Math.PI) / (channels[0]!.length * stepS);
  const sets: Pole[][] = [];
  for (let rank = 2; rank <= subspace.rank; rank++) {
    const poles = shiftPoles(subspace, rank)
      .map(tamed)
      .filter(({ omega }) => omega < 2 * Math.PI * upToHz && omega > slowest)
      .sort((p, q) => p.omega - q.omega);
    const fresh = poles.length > 0 && !sets.some((set) => alike(set, poles));
    if (fresh && distinct(poles, channels[0]!.length * stepS)) sets.push(poles);
  }
  return sets;
}

/** Whether a fit from either set would come to the same end. */
function alike(set: readonly Pole[], other: readonly Pole[]): boolean {
  if (set.length !== other.length) return false;
  return set.every((pole, k) => {
    const { alpha, omega } = other[k]!;
    return Math.hypot(pole.alpha - alpha, pole.omega - omega) < 0.1 * Math.max(alpha, 0.01 * omega);
  });
}

/** Noise may put a start value on the growing side; the fit then begins from light damping. */
function tamed({ alpha, omega }: Pole): Pole {
  return { alpha: Math.min(Math.max(alpha, 1e-3 * omega), omega), omega };
}

function strongestPole(records: readonly Float64Array[], stepS: number, band: readonly [number, number] | null): Pole {
  const omega = 2 * Math.PI * strongestHz(records, 1 / stepS, band);
  return { omega, alpha: Math.max(0.01 * omega, 2 / (records[0]!.length * stepS)) };
}
