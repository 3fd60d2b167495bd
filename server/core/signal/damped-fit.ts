import { CholeskyDecomposition, Matrix } from 'ml-matrix';
import type { Pole } from './pencil.ts';

/**
 * Maximum-likelihood fit of damped oscillations with common poles to several channels, each with its own
 * amplitudes, phases, offset and white noise. Amplitudes and offsets are eliminated (variable projection: Golub and
 * Pereyra 1973, in Kaufman's form 1975); the poles are found by Levenberg and Marquardt's method.
 */
export interface DampedFit {
  poles: Pole[];
  /** Per channel and pole: y = re · e^(−αt) cos ωt + im · e^(−αt) sin ωt. Row c holds offset, re0, im0, re1, im1, … */
  coefficients: Float64Array[];
  /** Residual sum of squares of each channel. */
  residual: Float64Array;
  /** Covariance of alpha0, omega0, alpha1, omega1, …: inverse Fisher information at the noise of the residuals. */
  covariance: Matrix;
  /** Twice the negative log-likelihood but for a constant: Σ n ln RSS. */
  deviance: number;
}

export interface FitData {
  channels: readonly Float64Array[];
  /** Sum of squares about the mean, each channel's; above 0. */
  energy: Float64Array;
  stepS: number;
}

/** Below this share of a channel's energy the residual is rounding. */
const ROUNDING = 1e-14;

/**
 * @param data channels of one length with energy above 0
 * @param start poles to begin from, at least one
 * @param iterations limit of accepted and refused steps
 * @returns null where the start cannot be fitted (coinciding poles, fewer samples than unknowns)
 */
export function fitDamped(data: FitData, start: readonly Pole[], iterations: number): DampedFit | null {
  const n = data.channels[0]!.length;
  if (n <= 4 * start.length + 1) return null;
  let state = evaluate(data, start);
  if (state === null) return null;
  let damping = 1e-3;
  for (let i = 0; i < iterations; i++) {
    const step = solveStep(state, damping);
    if (step === null) {
      damping *= 10;
      continue;
    }
    const moved = move(state.poles, step, data.stepS);
    const next = moved === null ? null : evaluate(data, moved);
    const small = relativeSize(state.poles, step) < 1e-11;
    if (next !== null && next.deviance <= state.deviance) {
      state = next;
      damping = Math.max(damping / 10, 1e-12);
    } else {
      damping *= 10;
    }
    if (small || damping > 1e9) break;
  }
  return finish(data, state);
}

interface State {
  poles: readonly Pole[];
  coefficients: Float64Array[];
  residual: Float64Array;
  deviance: number;
  /** Weighted JᵀJ and Jᵀr for alpha0, omega0, … */
  information: Matrix;
  gradient: Float64Array;
}

/** Everything needed for one step follows from inner products of the basis, its time-weighted copy, and the data. */
function evaluate(data: FitData, poles: readonly Pole[]): State | null {
  const n = data.channels[0]!.length;
  const columns = basis(poles, n, data.stepS);
  const linear = 2 * poles.length + 1;
  const curved = 2 * poles.length;
  const gram = Matrix.zeros(linear, linear);
  const mixed = Matrix.zeros(linear, curved);
  for (let i = 0; i < linear; i++) {
    for (let j = i; j < linear; j++) {
      const product = dot(columns[i]!, columns[j]!);
      gram.set(i, j, product);
      gram.set(j, i, product);
    }
    for (let j = 0; j < curved; j++) mixed.set(i, j, dot(columns[i]!, columns[linear + j]!));
  }
  const scales = Array.from({ length: linear }, (_, i) => 1 / Math.sqrt(gram.get(i, i)));
  for (let i = 0; i < linear; i++)
    for (let j = 0; j < linear; j++) gram.set(i, j, gram.get(i, j) * (scales[i]! * scales[j]!));
  const cholesky = new CholeskyDecomposition(gram);
  if (!cholesky.isPositiveDefinite() || illConditioned(cholesky)) return null;

  const solveGram = (right: Matrix): Matrix => {
    const scaled = right.clone();
    for (let i = 0; i < linear; i++) scaled.mulRow(i, scales[i]!);
    const solution = cholesky.solve(scaled);
    for (let i = 0; i < linear; i++) solution.mulRow(i, scales[i]!);
    return solution;
  };

  // What is left of the time-weighted columns when the basis is projected out.
  const projected = Matrix.zeros(curved, curved);
  for (let i = 0; i < curved; i++) {
    for (let j = i; j < curved; j++) {
      const product = dot(columns[linear + i]!, columns[linear + j]!);
      projected.set(i, j, product);
      projected.set(j, i, product);
    }
  }
  projected.sub(mixed.transpose().mmul(solveGram(mixed)));

  const channelCount = data.channels.length;
  const right = Matrix.zeros(linear, channelCount);
  for (let c = 0; c < channelCount; c++) {
    for (let i = 0; i < linear; i++) right.set(i, c, dot(columns[i]!, data.channels[c]!));
  }
  const solution = solveGram(right);

  const coefficients: Float64Array[] = [];
  const residual = new Float64Array(channelCount);
  const information = Matrix.zeros(curved, curved);
  const gradient = new Float64Array(curved);
  let deviance = 0;
  const error = new Float64Array(n);
  for (let c = 0; c < channelCount; c++) {
    const a = Float64Array.from({ length: linear }, (_, i) => solution.get(i, c));
    coefficients.push(a);
    error.set(data.channels[c]!);
    for (let i = 0; i < linear; i++) subtract(error, columns[i]!, a[i]!);
    residual[c] = Math.max(dot(error, error), ROUNDING * data.energy[c]!);
    deviance += n * Math.log(residual[c]!);
    const weight = n / residual[c]!;
    addInformation(information, gradient, a, projected, columns, linear, error, weight);
  }
  return { poles, coefficients, residual, deviance, information, gradient };
}

/**
 * The model's derivatives are combinations of the time-weighted columns t e^(−αt) cos and t e^(−αt) sin:
 * ∂y/∂α = −(re, im) and ∂y/∂ω = (im, −re).
 */
function addInformation(
  information: Matrix,
  gradient: Float64Array,
  a: Float64Array,
  projected: Matrix,
  columns: readonly Float64Array[],
  linear: number,
  error: Float64Array,
  weight: number,
): void {
  const size = gradient.length;
  const left = new Float64Array(size);
  const rightWeights = new Float64Array(size);
  for (let k = 0; k < size; k += 2) {
    const re = a[1 + k]!;
    const im = a[2 + k]!;
    left[k] = -re;
    rightWeights[k] = -im;
    left[k + 1] = im;
    rightWeights[k + 1] = -re;
    const withCos = dot(columns[linear + k]!, error);
    const withSin = dot(columns[linear + k + 1]!, error);
    gradient[k]! += weight * (-re * withCos - im * withSin);
    gradient[k + 1]! += weight * (im * withCos - re * withSin);
  }
  for (let p = 0; p < size; p++) {
    const row = p - (p % 2);
    for (let q = p; q < size; q++) {
      const column = q - (q % 2);
      const value =
        left[p]! * (projected.get(row, column) * left[q]! + projected.get(row, column + 1) * rightWeights[q]!) +
        rightWeights[p]! *
          (projected.get(row + 1, column) * left[q]! + projected.get(row + 1, column + 1) * rightWeights[q]!);
      information.set(p, q, information.get(p, q) + weight * value);
      if (p !== q) information.set(q, p, information.get(p, q));
    }
  }
}

function solveStep(state: State, damping: number): Float64Array | null {
  const size = state.gradient.length;
  const damped = state.information.clone();
  for (let i = 0; i < size; i++) damped.set(i, i, damped.get(i, i) * (1 + damping));
  const inverse = inverseOf(damped);
  if (inverse === null) return null;
  const step = new Float64Array(size);
  for (let i = 0; i < size; i++) {
    for (let j = 0; j < size; j++) step[i]! += inverse.get(i, j) * state.gradient[j]!;
  }
  return step;
}

/** Null where a step leads out of what the samples can show. */
function move(poles: readonly Pole[], step: Float64Array, stepS: number): Pole[] | null {
  const moved: Pole[] = [];
  for (const [k, pole] of poles.entries()) {
    const alpha = pole.alpha + step[2 * k]!;
    const omega = pole.omega + step[2 * k + 1]!;
    if (!(omega > 0 && omega < Math.PI / stepS && alpha > -0.05 * omega && alpha < 2 * omega)) return null;
    moved.push({ alpha, omega });
  }
  return moved;
}

function relativeSize(poles: readonly Pole[], step: Float64Array): number {
  let size = 0;
  for (const [k, { alpha, omega }] of poles.entries()) {
    size = Math.max(size, Math.hypot(step[2 * k]!, step[2 * k + 1]!) / Math.hypot(alpha, omega));
  }
  return size;
}

function finish(data: FitData, state: State): DampedFit | null {
  const channelCount = data.channels.length;
  const n = data.channels[0]!.length;
  // Weights used n / RSS; unbiased noise has fewer degrees of freedom.
  const free = n - (2 * state.poles.length + 1) - (2 * state.poles.length) / channelCount;
  const inverse = inverseOf(state.information);
  if (inverse === null) return null;
  return {
    poles: [...state.poles],
    coefficients: state.coefficients,
    residual: state.residual,
    covariance: inverse.mul(n / free),
    deviance: state.deviance,
  };
}

function inverseOf(matrix: Matrix): Matrix | null {
  const size = matrix.rows;
  const scaled = matrix.clone();
  const scales = Array.from({ length: size }, (_, i) => 1 / Math.sqrt(matrix.get(i, i)));
  for (let i = 0; i < size; i++) {
    for (let j = 0; j < size; j++) scaled.set(i, j, scaled.get(i, j) * (scales[i]! * scales[j]!));
  }
  const cholesky = new CholeskyDecomposition(scaled);
  if (!cholesky.isPositiveDefinite()) return null;
  const inverse = cholesky.solve(Matrix.eye(size));
  for (let i = 0; i < size; i++) {
    for (let j = 0; j < size; j++) inverse.set(i, j, inverse.get(i, j) * (scales[i]! * scales[j]!));
  }
  return inverse;
}

/** A pivot this small beside 1 means that two columns of the basis are the same to rounding. */
function illConditioned(cholesky: CholeskyDecomposition): boolean {
  return cholesky.lowerTriangularMatrix.diag().some((pivot) => !(pivot > 1e-5));
}

/** Columns 1, e^(−αt) cos ωt, e^(−αt) sin ωt, …, then the same oscillations times t. */
function basis(poles: readonly Pole[], n: number, stepS: number): Float64Array[] {
  const plain: Float64Array[] = [new Float64Array(n).fill(1)];
  const weighted: Float64Array[] = [];
  for (const { alpha, omega } of poles) {
    const decay = Math.exp(-alpha * stepS);
    const stepRe = decay * Math.cos(omega * stepS);
    const stepIm = decay * Math.sin(omega * stepS);
    const cosine = new Float64Array(n);
    const sine = new Float64Array(n);
    const cosineT = new Float64Array(n);
    const sineT = new Float64Array(n);
    let re = 1;
    let im = 0;
    for (let i = 0; i < n; i++) {
      const t = i * stepS;
      cosine[i] = re;
      sine[i] = im;
      cosineT[i] = t * re;
      sineT[i] = t * im;
      const next = re * stepRe - im * stepIm;
      im = re * stepIm + im * stepRe;
      re = next;
    }
    plain.push(cosine, sine);
    weighted.push(cosineT, sineT);
  }
  return [...plain, ...weighted];
}

function dot(x: Float64Array, y: Float64Array): number {
  const n = x.length;
  const whole = n - (n % 4);
  let a = 0;
  let b = 0;
  let c = 0;
  let d = 0;
  for (let i = 0; i < whole; i += 4) {
    a += x[i]! * y[i]!;
    b += x[i + 1]! * y[i + 1]!;
    c += x[i + 2]! * y[i + 2]!;
    d += x[i + 3]! * y[i + 3]!;
  }
  for (let i = whole; i < n; i++) a += x[i]! * y[i]!;
  return a + b + (c + d);
}

function subtract(from: Float64Array, column: Float64Array, factor: number): void {
  for (let i = 0; i < from.length; i++) from[i]! -= factor * column[i]!;
}
