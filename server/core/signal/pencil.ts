import { EigenvalueDecomposition, Matrix, solve } from 'ml-matrix';

/** A damped oscillation exp(−alpha t) cos(omega t + phase): rates per second, both in rad/s. */
export interface Pole {
  alpha: number;
  omega: number;
}

/** Longest run of samples compared with each other; more costs time and finds nothing new. */
const LONGEST_RUN = 64;

/** The signal subspace of records that share their poles. */
export interface Subspace {
  /** Columns by falling energy. */
  vectors: Matrix;
  stepS: number;
}

/**
 * Signal subspace of all channels together: eigenvectors of the summed covariance of their Hankel matrices.
 *
 * @param channels records of one length
 * @param stepS time between samples
 */
export function signalSubspace(channels: readonly Float64Array[], stepS: number): Subspace {
  const n = channels[0]?.length ?? 0;
  const run = Math.min(LONGEST_RUN, Math.floor(n / 2));
  const covariance = Matrix.zeros(run, run);
  for (const y of channels) addHankelCovariance(covariance, y, run);
  const decomposition = new EigenvalueDecomposition(covariance, { assumeSymmetric: true });
  // ml-matrix gives rising eigenvalues
  const order = Array.from({ length: run }, (_, i) => run - 1 - i);
  const all = Array.from({ length: run }, (_, i) => i);
  return { vectors: decomposition.eigenvectorMatrix.selection(all, order), stepS };
}

/**
 * Oscillating poles of the first `rank` subspace vectors, by their invariance under a shift of one sample
 * (Hua and Sarkar 1990, matrix pencil; Roy and Kailath 1989, ESPRIT). Exact for a noiseless sum of `rank`
 * exponentials; real poles (offset, drift) are left out.
 */
export function shiftPoles({ vectors, stepS }: Subspace, rank: number): Pole[] {
  const rows = vectors.rows;
  const upper = vectors.subMatrix(0, rows - 2, 0, rank - 1);
  const lower = vectors.subMatrix(1, rows - 1, 0, rank - 1);
  const transposed = upper.transpose();
  const gram = transposed.mmul(upper);
  let shift: Matrix;
  try {
    shift = solve(gram, transposed.mmul(lower));
  } catch {
    return []; // singular: the subspace is smaller than the rank asked for
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
