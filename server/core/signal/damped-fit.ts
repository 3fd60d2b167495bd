import type { Pole } from './pencil.ts';
import { factorise, inverseOf, solveInto } from './positive-definite.ts';

/**
 * Maximum-likelihood fit of damped oscillations with common poles to several channels, each with its own
 * amplitudes, phases, straight base line and white noise. Amplitudes and base lines are eliminated (variable projection: Golub and
 * Pereyra 1973, in Kaufman's form 1975); the poles are found by Levenberg and Marquardt's method.
 */
export interface DampedFit {
  poles: Pole[];
  /**
   * Row c holds channel c: level and slope of its base line (`DRIFT` numbers), then for each pole the factors of
   * e^(−αt) cos ωt and e^(−αt) sin ωt.
   */
  coefficients: Float64Array[];
  /** Residual sum of squares of each channel, no nearer to zero than rounding allows. */
  residual: Float64Array;
  /** Covariance of alpha0, omega0, alpha1, …, row by row: inverse Fisher information at the noise of the residuals. */
  covariance: Float64Array;
  /** Twice the negative log-likelihood but for a constant: Σ n ln RSS. */
  deviance: number;
}

export interface FitData {
  /** Records about their mean, of one length. */
  channels: readonly Float64Array[];
  /** Sum of squares of each channel; above 0. */
  energy: Float64Array;
  stepS: number;
}

export interface FitEffort {
  /** Limit of accepted and refused steps. */
  steps: number;
  /** A step that betters the deviance by less than this is the last; 0 goes on until the poles stand still. */
  enough: number;
}

/** Columns of the basis before those of the poles: 1, and the time from the middle of the record. */
export const DRIFT = 2;
/** Below this share of a channel's energy the residual is rounding: it is the difference of two sums. */
const ROUNDING = 1e-13;
/** Columns of the basis of which less than this is their own are the same to rounding. */
const LEAST_PIVOT = 1e-5;

/**
 * @param data channels of one length with energy above 0
 * @param start poles to begin from, at least one
 * @returns null where the start cannot be fitted: coinciding poles, fewer samples than unknowns
 */
export function fitDamped(data: FitData, start: readonly Pole[], effort: FitEffort): DampedFit | null {
  const n = data.channels[0]!.length;
  if (n <= 4 * start.length + DRIFT) return null;
  const columns = Array.from({ length: 4 * start.length + DRIFT }, () => new Float64Array(n));
  const begun = evaluate(data, start, columns);
  if (begun === null) return null;
  let state: State = begun;
  let damping = 1e-3;
  for (let i = 0; i < effort.steps && damping < 1e9; i++) {
    const step = dampedStep(state, damping);
    const moved: Pole[] | null = step === null ? null : move(state.poles, step, n, data.stepS);
    const next: State | null = moved === null ? null : evaluate(data, moved, columns);
    const still = step !== null && relativeSize(state.poles, step) < 1e-11;
    if (next !== null && next.deviance <= state.deviance) {
      const gained = state.deviance - next.deviance;
      state = next;
      damping = Math.max(damping / 10, 1e-12);
      if (gained < effort.enough) break;
    } else {
      damping *= 10;
    }
    if (still) break;
  }
  return finish(data, state);
}

/** What a fit leaves of the records it was made from. */
export function residualsOf(data: FitData, fit: DampedFit): Float64Array[] {
  return data.channels.map((y, c) => {
    const a = fit.coefficients[c]!;
    const left = new Float64Array(y.length);
    for (let i = 0; i < y.length; i++) left[i] = y[i]! - a[0]! - a[1]! * baseTime(i, y.length);
    for (const [k, pole] of fit.poles.entries()) {
      subtractOscillation(left, a[DRIFT + 2 * k]!, a[DRIFT + 1 + 2 * k]!, pole, data.stepS);
    }
    return left;
  });
}

interface State {
  poles: readonly Pole[];
  coefficients: Float64Array[];
  residual: Float64Array;
  deviance: number;
  /** Weighted JᵀJ, row by row, and Jᵀr for alpha0, omega0, … */
  information: Float64Array;
  gradient: Float64Array;
}

/** Everything needed for one step follows from inner products of the basis, its time-weighted copy, and the data. */
function evaluate(data: FitData, poles: readonly Pole[], columns: readonly Float64Array[]): State | null {
  const n = data.channels[0]!.length;
  const linear = 2 * poles.length + DRIFT;
  const curved = 2 * poles.length;
  fillBasis(columns, poles, data.stepS);

  const gram = new Float64Array(linear * linear);
  const mixed = new Float64Array(curved * linear);
  for (let i = 0; i < linear; i++) {
    for (let j = 0; j <= i; j++) gram[i * linear + j] = dot(columns[i]!, columns[j]!);
    for (let j = 0; j < curved; j++) mixed[j * linear + i] = dot(columns[i]!, columns[linear + j]!);
  }
  const factored = factorise(gram, linear);
  if (factored === null || factored.pivot < LEAST_PIVOT) return null;

  // What is left of the time-weighted columns when the basis is projected out.
  const projected = new Float64Array(curved * curved);
  const solved = mixed.slice();
  for (let j = 0; j < curved; j++) solveInto(factored, solved, j * linear);
  for (let i = 0; i < curved; i++) {
    for (let j = 0; j <= i; j++) {
      let product = dot(columns[linear + i]!, columns[linear + j]!);
      for (let k = 0; k < linear; k++) product -= mixed[i * linear + k]! * solved[j * linear + k]!;
      projected[i * curved + j] = product;
      projected[j * curved + i] = product;
    }
  }

  const count = data.channels.length;
  const coefficients: Float64Array[] = [];
  const residual = new Float64Array(count);
  const information = new Float64Array(curved * curved);
  const gradient = new Float64Array(curved);
  const slope = new Float64Array(curved);
  const right = new Float64Array(linear);
  let deviance = 0;
  for (let c = 0; c < count; c++) {
    const y = data.channels[c]!;
    for (let i = 0; i < linear; i++) right[i] = dot(columns[i]!, y);
    const a = right.slice();
    solveInto(factored, a);
    let explained = 0;
    for (let i = 0; i < linear; i++) explained += a[i]! * right[i]!;
    for (let j = 0; j < curved; j++) {
      let product = dot(columns[linear + j]!, y);
      for (let i = 0; i < linear; i++) product -= mixed[j * linear + i]! * a[i]!;
      slope[j] = product;
    }
    coefficients.push(a);
    residual[c] = Math.max(data.energy[c]! - explained, ROUNDING * data.energy[c]!);
    deviance += n * Math.log(residual[c]!);
    addInformation(information, gradient, a, projected, slope, n / residual[c]!);
  }
  return { poles, coefficients, residual, deviance, information, gradient };
}

/**
 * The model's derivatives are combinations of the time-weighted columns t e^(−αt) cos and t e^(−αt) sin:
 * ∂y/∂α = −(re, im) and ∂y/∂ω = (im, −re). `slope` holds the products of those columns with the residuals.
 */
function addInformation(
  information: Float64Array,
  gradient: Float64Array,
  a: Float64Array,
  projected: Float64Array,
  slope: Float64Array,
  weight: number,
): void {
  const size = gradient.length;
  for (let p = 0; p < size; p += 2) {
    const reP = a[DRIFT + p]!;
    const imP = a[DRIFT + 1 + p]!;
    gradient[p]! += weight * (-reP * slope[p]! - imP * slope[p + 1]!);
    gradient[p + 1]! += weight * (imP * slope[p]! - reP * slope[p + 1]!);
    for (let q = 0; q < size; q += 2) {
      const reQ = a[DRIFT + q]!;
      const imQ = a[DRIFT + 1 + q]!;
      const cc = weight * projected[p * size + q]!;
      const cs = weight * projected[p * size + q + 1]!;
      const sc = weight * projected[(p + 1) * size + q]!;
      const ss = weight * projected[(p + 1) * size + q + 1]!;
      information[p * size + q]! += reP * (cc * reQ + cs * imQ) + imP * (sc * reQ + ss * imQ);
      information[p * size + q + 1]! += reP * (cs * reQ - cc * imQ) + imP * (ss * reQ - sc * imQ);
      information[(p + 1) * size + q]! += reP * (sc * reQ + ss * imQ) - imP * (cc * reQ + cs * imQ);
      information[(p + 1) * size + q + 1]! += imP * (cc * imQ - cs * reQ) + reP * (ss * reQ - sc * imQ);
    }
  }
}

function dampedStep(state: State, damping: number): Float64Array | null {
  const size = state.gradient.length;
  const damped = state.information.slice();
  for (let i = 0; i < size; i++) damped[i * size + i]! *= 1 + damping;
  const factored = factorise(damped, size);
  if (factored === null) return null;
  const step = state.gradient.slice();
  solveInto(factored, step);
  return step;
}

/** Null where a step leads out of what the samples can show: less than a cycle is drift, above half the rate nothing. */
function move(poles: readonly Pole[], step: Float64Array, samples: number, stepS: number): Pole[] | null {
  const moved: Pole[] = [];
  const lowest = (2 * Math.PI) / (samples * stepS);
  for (const [k, pole] of poles.entries()) {
    const alpha = pole.alpha + step[2 * k]!;
    const omega = pole.omega + step[2 * k + 1]!;
    if (!(omega > lowest && omega < Math.PI / stepS && alpha > -0.05 * omega && alpha < 2 * omega)) return null;
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
  const factored = factorise(state.information, state.gradient.length);
  if (factored === null) return null;
  // Weights used n / RSS; unbiased noise has fewer degrees of freedom.
  const n = data.channels[0]!.length;
  const free = degreesOfFreedom(n, state.poles.length, data.channels.length);
  return {
    poles: [...state.poles],
    coefficients: state.coefficients,
    residual: state.residual,
    covariance: inverseOf(factored).map((v) => (v * n) / free),
    deviance: state.deviance,
  };
}

/** Samples of one channel less its own unknowns and its share of the common ones. */
export function degreesOfFreedom(samples: number, modes: number, channels: number): number {
  return samples - (2 * modes + DRIFT) - (2 * modes) / channels;
}

/** Columns 1, t, e^(−αt) cos ωt, e^(−αt) sin ωt, …, then the same oscillations times t. */
function fillBasis(columns: readonly Float64Array[], poles: readonly Pole[], stepS: number): void {
  columns[0]!.fill(1);
  const slope = columns[1]!;
  for (let i = 0; i < slope.length; i++) slope[i] = baseTime(i, slope.length);
  const weighted = DRIFT + 2 * poles.length;
  for (const [k, { alpha, omega }] of poles.entries()) {
    const cosine = columns[DRIFT + 2 * k]!;
    const sine = columns[DRIFT + 1 + 2 * k]!;
    const cosineT = columns[weighted + 2 * k]!;
    const sineT = columns[weighted + 1 + 2 * k]!;
    const decay = Math.exp(-alpha * stepS);
    const stepRe = decay * Math.cos(omega * stepS);
    const stepIm = decay * Math.sin(omega * stepS);
    let re = 1;
    let im = 0;
    for (let i = 0; i < cosine.length; i++) {
      const t = i * stepS;
      cosine[i] = re;
      sine[i] = im;
      cosineT[i] = t * re;
      sineT[i] = t * im;
      const next = re * stepRe - im * stepIm;
      im = re * stepIm + im * stepRe;
      re = next;
    }
  }
}

/** −1 at the first sample, 1 at the last. */
function baseTime(i: number, samples: number): number {
  return (2 * i) / (samples - 1) - 1;
}

function subtractOscillation(
  y: Float64Array,
  cosine: number,
  sine: number,
  { alpha, omega }: Pole,
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

/** Four sums side by side: the additions need not wait for each other. */
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
