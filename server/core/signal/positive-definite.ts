/**
 * Small symmetric positive definite systems in flat arrays, row by row, as they come up in every step of a fit:
 * without an object for each row. Rows and columns are scaled to unit diagonal first, so that a pivot says how much
 * of a column is not explained by those before it.
 */
export interface Factored {
  size: number;
  /** Lower triangle L of the scaled matrix, L Lᵀ. */
  lower: Float64Array;
  /** 1 / √ of the diagonal of the matrix. */
  scales: Float64Array;
  /** Smallest diagonal element of L: 1 for a diagonal matrix, 0 for a singular one. */
  pivot: number;
}

/**
 * Cholesky's factor of a matrix, of which the lower triangle is read.
 *
 * @returns null where the matrix is not positive definite
 * @example factorise(Float64Array.of(4, 2, 2, 3), 2)?.pivot // 0.8165
 */
export function factorise(matrix: Float64Array, size: number): Factored | null {
  const lower = new Float64Array(size * size);
  const scales = new Float64Array(size);
  let pivot = 1;
  for (let i = 0; i < size; i++) {
    scales[i] = 1 / Math.sqrt(matrix[i * size + i]!);
    for (let j = 0; j <= i; j++) {
      let sum = matrix[i * size + j]! * (scales[i]! * scales[j]!);
      for (let k = 0; k < j; k++) sum -= lower[i * size + k]! * lower[j * size + k]!;
      if (j < i) {
        lower[i * size + j] = sum / lower[j * size + j]!;
      } else {
        if (!(sum > 0)) return null;
        const root = Math.sqrt(sum);
        lower[i * size + i] = root;
        pivot = Math.min(pivot, root);
      }
    }
  }
  return { size, lower, scales, pivot };
}

/** Solves in place for one right-hand side, `size` numbers from `at`. */
export function solveInto({ size, lower, scales }: Factored, right: Float64Array, at = 0): void {
  for (let i = 0; i < size; i++) {
    let sum = right[at + i]! * scales[i]!;
    for (let k = 0; k < i; k++) sum -= lower[i * size + k]! * right[at + k]!;
    right[at + i] = sum / lower[i * size + i]!;
  }
  for (let i = size - 1; i >= 0; i--) {
    let sum = right[at + i]!;
    for (let k = i + 1; k < size; k++) sum -= lower[k * size + i]! * right[at + k]!;
    right[at + i] = sum / lower[i * size + i]!;
  }
  for (let i = 0; i < size; i++) right[at + i]! *= scales[i]!;
}

/** The inverse matrix, row by row. */
export function inverseOf(factored: Factored): Float64Array {
  const { size } = factored;
  const inverse = new Float64Array(size * size);
  for (let i = 0; i < size; i++) {
    inverse[i * size + i] = 1;
    solveInto(factored, inverse, i * size);
  }
  return inverse;
}
