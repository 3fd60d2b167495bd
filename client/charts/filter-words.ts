/** What is wrong with the ends of a range of magnitudes; empty where nothing is. An end that is not given is undefined. */
export function rangeTrouble(low: number | undefined, high: number | undefined): string {
  for (const end of [low, high]) {
    if (end !== undefined && !Number.isFinite(end)) return 'Not a number; not used.';
    if (end !== undefined && end < 0) return 'Below zero; not used.';
  }
  if (low !== undefined && high !== undefined && low > high) return `From ${low} is above ${high}; not used.`;
  return '';
}

const DAY = /^\d{4}-\d{2}-\d{2}$/;

/** What is wrong with the first and the last day, as `2026-12-01`. */
export function daysTrouble(from: string, to: string): string {
  if (![from, to].every((day) => DAY.test(day) && !Number.isNaN(Date.parse(day)))) return 'Not a day; not used.';
  return from > to ? 'The first day is after the last; not used.' : '';
}
