/** One line of the table. */
export interface Figure {
  what: string;
  value: number;
  unit: string;
  /** What is aimed at, for the reader. */
  aim?: string;
}
