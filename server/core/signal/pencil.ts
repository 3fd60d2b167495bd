import { EigenvalueDecomposition, Matrix } from 'ml-matrix';

/** A damped oscillation exp(−alpha t) cos(omega t + phase): rates per second, both in rad/s. */
export interface Pole {
  alpha: number;
  omega: number;
}

/** Longest run of samples compared with each other; more costs time and finds nothing new. */
const LONGEST_RUN = 48;

/** The signal subspace of records that share their poles, as far as shift invariance asks. */
export interface Subspace {
  /** How many vectors there are at most. */
  rank: number;
  /** Product of the vectors without their last and without their first element: rank × rank. */
  shifted: Matrix;
  /** Last element of each vector. */
  last: Float64Array;
  stepS: number;
}

/**
 * Signal subspace of all channels together: eigenvectors of the summed covariance of their Hankel matrices.
 *
 * @param channels records of one length, at least 4 samples
 * @param stepS time between samples
 * @param rank vectors wanted; fewer come where the records are short
 */
export function signalSubspace(channels: readonly Float64Array[], stepS: number, rank: number): Subspace {
  const run = Math.min(LONGEST_RUN, Math.floor(channels[0]!.length / 2));
  const covariance = Matrix.zeros(run, run);
  for (const y of channels) addHankelCovariance(covariance, y, run);
  const { eigenvectorMatrix } = new EigenvalueDecomposition(covariance, { assumeSymmetric: true });
  const count = Math.min(rank, run - 1);
  // ml-matrix gives rising eigenvalues: the strongest vectors stand last
  const vectors = Array.from({ length: count }, (_, k) => Float64Array.from(eigenvectorMatrix.getColumn(run - 1 - k)));
  const shifted = Matrix.zeros(count, count);
  for (let i = 0; i < count; i++) {
    for (let j = 0; j < count; j++) {
      let product = 0;
      for (let m = 0; m + 1 < run; m++) product += vectors[i]![m]! * vectors[j]![m + 1]!;
      shifted.set(i, j, product);
    }
  }
  return { rank: count, shifted, last: Float64Array.from(vectors, (v) => v[run - 1]!), stepS };
}

/**
 * Oscillating poles of the first `rank` subspace vectors, by their invariance under a shift of one sample
 * (Hua and Sarkar 1990, matrix pencil; Roy and Kailath 1989, ESPRIT). Exact for a noiseless sum of `rank`
 * exponentials; real poles (offset, drift) are left out.
 *
 * The vectors are orthonormal, so the normal matrix of the shift equation is 1 − l lᵀ with l their last elements, and
 * its inverse is 1 + l lᵀ / (1 − lᵀl).
 */
export function shiftPoles({ shifted, last, stepS }: Subspace, rank: number): Pole[] {
  let left = 1;
  for (let i = 0; i < rank; i++) left -= last[i]! * last[i]!;
  if (left < 1e-9) return [];
  const shift = shifted.subMatrix(0, rank - 1, 0, rank - 1);
  for (let j = 0; j < rank; j++) {
    let product = 0;
    for (let i = 0; i < rank; i++) product += last[i]! * shifted.get(i, j);
    for (let i = 0; i < rank; i++) shift.set(i, j, shift.get(i, j) + (last[i]! * product) / left);
  }
  const { realEigenvalues, imaginaryEigenvalues } = new EigenvalueDecomposition(shift);
  const poles: Pole[] = [];
  for (let i = 0; i < rank; i++) {
    const re = realEigenvalues[i]!;
    const im = imaginaryEigenvalues[i]!;
    if (!(im > 0)) continue;
    poles.push({ alpha: -Math.log(Math.hypot(re, im)) / stepS, omega: Math.atan2(im, re) / stepS });
  }
  return poles;
}

/**
 * Adds HᵀH for the Hankel matrix H[m, i] = y[m + i]. From one corner each diagonal follows by one product in and
 * one out; going towards earlier samples the larger product is the one that comes in.
 */
function addHankelCovariance(sum: Matrix, y: Float64Array, run: number): void {
  const rows = y.length - run + 1;
  for (let lag = 0; lag < run; lag++) {
    let product = 0;
    const i0 = run - 1 - lag;
    for (let m = 0; m < rows; m++) product += y[m + i0]! * y[m + run - 1]!;
    for (let i = i0; ; i--) {
      const j = i + lag;
      sum.set(i, j, sum.get(i, j) + product);
      if (lag > 0) sum.set(j, i, sum.get(j, i) + product);
      if (i === 0) break;
      product += y[i - 1]! * y[j - 1]! - y[i - 1 + rows]! * y[j - 1 + rows]!;
    }
  }
}
