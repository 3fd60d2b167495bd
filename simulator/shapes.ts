/** Shapes of modes along the bridge, scaled to a largest value of 1. */
export interface Shape {
  /** Where it is not zero: from the first bearing of the bridge, m. */
  startM: number;
  lengthM: number;
  at(alongM: number): number;
  /** Second derivative, 1/m². */
  curvatureAt(alongM: number): number;
  /** Integral of its square over its length, m: modal mass is this times the mass per metre. */
  squareIntegralM: number;
}

/** Half sines of a simply supported span. */
export function sineShape({ startM, lengthM, order }: { startM: number; lengthM: number; order: number }): Shape {
  const k = (order * Math.PI) / lengthM;
  return {
    startM,
    lengthM,
    at: (alongM) => Math.sin(k * (alongM - startM)),
    curvatureAt: (alongM) => -k * k * Math.sin(k * (alongM - startM)),
    squareIntegralM: lengthM / 2,
  };
}

/** Sines that a continuous shape is made of; the error of its frequency falls with the cube of their number. */
const SINES = 48;

/**
 * Bending modes of a uniform girder that runs over several spans on unyielding supports: sums of sines over the whole
 * length (which are the modes without inner supports), held at the inner supports (Rayleigh and Ritz).
 *
 * @param lengthsM spans from left to right
 * @param count how many modes, lowest first; at most half the number of sines
 * @returns shapes with numbers that their frequencies are proportional to
 */
export function continuousShapes(
  lengthsM: readonly number[],
  startM: number,
  count: number,
): { shape: Shape; frequencyRatio: number }[] {
  const lengthM = lengthsM.reduce((sum, each) => sum + each, 0);
  const basis = heldBasis(innerSupports(lengthsM).map((support) => sines((Math.PI * support) / lengthM)));
  const stiffness = basis.map((row) =>
    basis.map((column) => row.reduce((sum, value, k) => sum + value * column[k]! * (k + 1) ** 4, 0)),
  );
  return eigen(stiffness)
    .sort((a, b) => a.value - b.value)
    .slice(0, Math.min(count, SINES / 2))
    .map(({ value, vector }) => {
      const weights = Array.from({ length: SINES }, (_, k) =>
        basis.reduce((sum, row, i) => sum + row[k]! * vector[i]!, 0),
      );
      return { shape: sumOfSines(weights, startM, lengthM), frequencyRatio: Math.sqrt(value) };
    });
}

function innerSupports(lengthsM: readonly number[]): number[] {
  let at = 0;
  return lengthsM.slice(0, -1).map((length) => (at += length));
}

function sines(angle: number): number[] {
  return Array.from({ length: SINES }, (_, k) => Math.sin((k + 1) * angle));
}

/** Orthonormal basis of all vectors at right angles to the given ones, by Gram and Schmidt done twice. */
function heldBasis(held: readonly number[][]): number[][] {
  const all: number[][] = [];
  const take = (vector: number[]): void => {
    let rest = vector;
    for (let pass = 0; pass < 2; pass++) {
      for (const other of all) {
        const share = dot(rest, other);
        rest = rest.map((value, k) => value - share * other[k]!);
      }
    }
    const size = Math.sqrt(dot(rest, rest));
    if (size > 1e-8) all.push(rest.map((value) => value / size));
  };
  held.forEach(take);
  const heldCount = all.length;
  for (let k = 0; k < SINES; k++) take(Array.from({ length: SINES }, (_, i) => (i === k ? 1 : 0)));
  return all.slice(heldCount);
}

function dot(a: readonly number[], b: readonly number[]): number {
  return a.reduce((sum, value, k) => sum + value * b[k]!, 0);
}

function sumOfSines(weights: readonly number[], startM: number, lengthM: number): Shape {
  const sum = (alongM: number, power: number): number =>
    weights.reduce((total, weight, k) => {
      const wave = ((k + 1) * Math.PI) / lengthM;
      return total + weight * wave ** power * Math.sin(wave * (alongM - startM));
    }, 0);
  let largest = 0;
  for (let i = 1; i < 2000; i++) {
    const value = sum(startM + (i * lengthM) / 2000, 0);
    if (Math.abs(value) > Math.abs(largest)) largest = value;
  }
  return {
    startM,
    lengthM,
    at: (alongM) => sum(alongM, 0) / largest,
    curvatureAt: (alongM) => -sum(alongM, 2) / largest,
    squareIntegralM: (lengthM / 2) * (dot(weights, weights) / largest ** 2),
  };
}

/** Eigenvalues and vectors of a symmetric matrix by cyclic Jacobi rotations (Golub and Van Loan, 8.5). */
function eigen(symmetric: readonly number[][]): { value: number; vector: number[] }[] {
  const a = symmetric.map((row) => [...row]);
  const n = a.length;
  const v = a.map((_, i) => a.map((__, j) => (i === j ? 1 : 0)));
  for (let sweep = 0; sweep < 30; sweep++) {
    let turned = false;
    for (let p = 0; p < n; p++) {
      for (let q = p + 1; q < n; q++) turned = rotate(a, v, p, q) || turned;
    }
    if (!turned) break;
  }
  return a.map((row, i) => ({ value: row[i]!, vector: v.map((each) => each[i]!) }));
}

/** Makes entry (p, q) zero; false where it is as good as zero already. */
function rotate(a: number[][], v: number[][], p: number, q: number): boolean {
  const off = a[p]![q]!;
  if (Math.abs(off) < 1e-15 * Math.sqrt(Math.abs(a[p]![p]! * a[q]![q]!))) return false;
  const tau = (a[q]![q]! - a[p]![p]!) / (2 * off);
  const t = Math.sign(tau || 1) / (Math.abs(tau) + Math.sqrt(1 + tau * tau));
  const c = 1 / Math.sqrt(1 + t * t);
  const s = t * c;
  for (const row of a) turn(row, p, q, c, s);
  for (let k = 0; k < a.length; k++) {
    const top = a[p]![k]!;
    const bottom = a[q]![k]!;
    a[p]![k] = c * top - s * bottom;
    a[q]![k] = s * top + c * bottom;
  }
  for (const row of v) turn(row, p, q, c, s);
  return true;
}

function turn(row: number[], p: number, q: number, c: number, s: number): void {
  const left = row[p]!;
  const right = row[q]!;
  row[p] = c * left - s * right;
  row[q] = s * left + c * right;
}
