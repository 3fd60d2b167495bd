import { sentence, SpanbeatError, type Complaint, type ErrorCode } from '#core/contract/errors.ts';

/** What scripts can rely on. */
export const EXIT = {
  good: 0,
  /** The input was read and something is wrong in it. */
  wrongInput: 1,
  /** The command itself was not understood. */
  usage: 2,
  /** A file, port, disk or neighbour failed. */
  environment: 3,
} as const;

/** Where a command writes: results to `out`, everything else to `err`. */
export interface Console {
  /** Resolves when the reader can take more. */
  out(text: string): Promise<void>;
  err(text: string): void;
}

/** Codes that speak of the machine and its neighbours rather than of what was given. */
const ENVIRONMENT: ReadonlySet<ErrorCode> = new Set<ErrorCode>([
  'DEFINITION_UNREADABLE',
  'RECORDING_UNREADABLE',
  'FILE_UNWRITABLE',
  'BROKER_UNREACHABLE',
  'BROKER_REFUSED',
  'PORT_IN_USE',
  'PORT_REFUSED',
  'DISK_FULL',
  'JOURNAL_WRITE',
  'STORE_CORRUPT',
  'STORE_LOCKED',
  'STORE_NEWER',
  'STORE_WRITE',
]);

export function exitOf(code: ErrorCode): number {
  if (code === 'USAGE' || code === 'SETTINGS_INVALID') return EXIT.usage;
  return ENVIRONMENT.has(code) ? EXIT.environment : EXIT.wrongInput;
}

/** Tells complaints, one a line. @returns the exit code: that of the gravest */
export function complain(complaints: readonly Complaint[], console: Console): number {
  for (const complaint of complaints) console.err(`${sentence(complaint)}\n`);
  return Math.max(EXIT.good, ...complaints.map(({ code }) => exitOf(code)));
}

/** Tells a failure from outside. Mistakes of our own are thrown on, with their stack. */
export function complainOf(error: unknown, console: Console): number {
  if (!(error instanceof SpanbeatError)) throw error;
  console.err(`${error.message}\n`);
  return exitOf(error.code);
}
