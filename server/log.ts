import { pino, type Logger } from 'pino';
import { sentence, type Complaint } from '#core/contract/errors.ts';
import type { LogLevel } from './settings.ts';

export interface Log {
  logger: Logger;
  /** A complaint; of each code one in a while is written, with how many were left out. */
  complain(complaint: Complaint): void;
}

/** Of one code, a line is written at most this often. */
const QUIET_MS = 10_000;

/** Lines of JSON, or for a person where somebody looks on. */
export function createLog(level: LogLevel): Log {
  const logger = process.stderr.isTTY
    ? pino({ level, base: null }, { write: (line: string) => void process.stderr.write(forPerson(line)) })
    : pino({ level, base: null }, pino.destination({ dest: 2, sync: true }));
  const told = new Map<string, { atMs: number; leftOut: number }>();
  return {
    logger,
    complain(complaint) {
      const before = told.get(complaint.code);
      if (before !== undefined && performance.now() - before.atMs < QUIET_MS) {
        before.leftOut += 1;
        return;
      }
      told.set(complaint.code, { atMs: performance.now(), leftOut: 0 });
      const more = before === undefined || before.leftOut === 0 ? '' : ` (and ${before.leftOut} more of this code)`;
      logger.warn({ code: complaint.code }, sentence(complaint) + more);
    },
  };
}

const LEVELS: Readonly<Record<number, string>> = { 20: 'debug', 30: '', 40: 'note', 50: 'FAULT', 60: 'FATAL' };

/** `06:12:33 note TIME_IN_FUTURE: …`, UTC. */
function forPerson(line: string): string {
  const { time, level, msg, err } = JSON.parse(line) as {
    time: number;
    level: number;
    msg?: string;
    err?: { stack?: string };
  };
  const word = LEVELS[level] ?? '';
  const parts = [new Date(time).toISOString().slice(11, 19), word, msg ?? '', err?.stack ?? ''];
  return `${parts.filter((part) => part !== '').join(' ')}\n`;
}
