import { ERRORS, sentence, type Complaint, type ErrorCode } from '#core/contract/errors.ts';
import type { ErrorRow } from '#core/contract/api.ts';

/** Where every shell takes its complaints. */
export type Report = (complaint: Complaint) => void;

export interface ComplaintLog {
  report: Report;
  /** Complaints by code since the start; codes that never came up are absent. */
  counts(): Record<string, number>;
  /** Every code of the table with its count and newest case, most frequent first. */
  rows(): ErrorRow[];
}

/** Longest text kept of one complaint; what a hostile message put into it is cut there. */
const LIMIT_TEXT = 500;

/**
 * Counts complaints by code and keeps the newest case of each: bounded by the table of codes, however many come.
 *
 * @param onward also hears each complaint, for the program's log
 */
export function createComplaintLog(onward?: Report): ComplaintLog {
  const cases = new Map<ErrorCode, { count: number; last: string }>();
  return {
    report(complaint) {
      const known = cases.get(complaint.code);
      const last = shortened(sentence(complaint));
      if (known === undefined) cases.set(complaint.code, { count: 1, last });
      else {
        known.count += 1;
        known.last = last;
      }
      onward?.(complaint);
    },
    counts: () => Object.fromEntries([...cases].map(([code, { count }]) => [code, count])),
    rows: () =>
      (Object.keys(ERRORS) as ErrorCode[])
        .map((code) => ({
          code,
          ...ERRORS[code],
          count: cases.get(code)?.count ?? 0,
          last: cases.get(code)?.last ?? null,
        }))
        .sort((a, b) => b.count - a.count),
  };
}

function shortened(text: string): string {
  return text.length <= LIMIT_TEXT ? text : `${text.slice(0, LIMIT_TEXT - 1)}…`;
}
