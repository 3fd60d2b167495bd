/** One line of the table. */
export interface Figure {
  what: string;
  value: number;
  unit: string;
  /** What is aimed at, for the reader. */
  aim?: string;
}

/** Nearest rank; 1 for the longest. */
export function quantile(values: readonly number[], share: number): number {
  const sorted = values.toSorted((a, b) => a - b);
  return sorted[Math.min(sorted.length - 1, Math.floor(share * sorted.length))] ?? NaN;
}
