import { SpanbeatError } from '#core/contract/errors.ts';

/** A line of a text file, as a stretch of bytes without its end mark. */
export interface Line {
  bytes: Uint8Array;
  from: number;
  to: number;
  /** From 1, blank lines and comments counted. */
  number: number;
  /** True for a last line that has no end mark: it may have been cut. */
  torn: boolean;
}

/** Lines that matter, from a stream of bytes, a chunk at a time. */
export interface LineSource {
  /** The next line in hand; null where more bytes are needed. */
  take(): Line | null;
  /** Fetches more. @returns false at the end */
  refill(): Promise<boolean>;
  close(): Promise<void>;
}

/** A longer line is no row of samples; it would only fill memory. */
const LIMIT_LINE_BYTES = 1024 * 1024;

const NEWLINE = 10;
const RETURN = 13;

/**
 * Blank lines and comments (`#`, `%`, `//`) are passed over, as is a byte order mark.
 *
 * @throws SpanbeatError RECORDING_UNREADABLE where the stream fails, RECORDING_FORMAT for UTF-16 and for endless lines
 */
export function createLineSource(chunks: AsyncIterable<Uint8Array>, file: string): LineSource {
  const stream = chunks[Symbol.asyncIterator]();
  let ready: Line[] = [];
  let at = 0;
  let carry: Uint8Array = new Uint8Array(0);
  let count = 0;
  let begun = false;
  let ended = false;

  const add = (bytes: Uint8Array, from: number, to: number, torn: boolean): void => {
    count++;
    const end = to > from && bytes[to - 1] === RETURN ? to - 1 : to;
    if (!isComment(bytes, from, end)) ready.push({ bytes, from, to: end, number: count, torn });
  };
  const cut = (fresh: Uint8Array): void => {
    const bytes = carry.length === 0 ? fresh : Buffer.concat([carry, fresh]);
    let from = 0;
    if (!begun && bytes.length >= 3) {
      from = markLength(bytes, file);
      begun = true;
    }
    for (let end = bytes.indexOf(NEWLINE, from); end !== -1; end = bytes.indexOf(NEWLINE, from)) {
      add(bytes, from, end, false);
      from = end + 1;
    }
    carry = bytes.subarray(from);
    if (carry.length > LIMIT_LINE_BYTES) {
      const detail = `found a line of more than ${LIMIT_LINE_BYTES} bytes, expected a row of samples`;
      throw new SpanbeatError({ code: 'RECORDING_FORMAT', where: `${file}:${count + 1}`, detail });
    }
  };

  return {
    take() {
      return at < ready.length ? ready[at++]! : null;
    },
    async refill() {
      ready = [];
      at = 0;
      while (ready.length === 0 && !ended) {
        const next = await stream.next().catch((error: unknown) => {
          const detail = error instanceof Error ? error.message : String(error);
          throw new SpanbeatError({ code: 'RECORDING_UNREADABLE', where: file, detail });
        });
        if (next.done !== true) cut(next.value);
        else {
          ended = true;
          if (carry.length > 0) add(carry, 0, carry.length, true);
        }
      }
      return ready.length > 0;
    },
    async close() {
      ended = true;
      ready = [];
      await stream.return?.();
    },
  };
}

function isComment(bytes: Uint8Array, from: number, to: number): boolean {
  let at = from;
  while (at < to && (bytes[at] === 32 || bytes[at] === 9)) at++;
  if (at === to) return true;
  const first = bytes[at];
  return first === 35 || first === 37 || (first === 47 && bytes[at + 1] === 47);
}

function markLength(bytes: Uint8Array, file: string): number {
  const [a, b, c] = bytes;
  if ((a === 0xff && b === 0xfe) || (a === 0xfe && b === 0xff)) {
    throw new SpanbeatError({ code: 'RECORDING_FORMAT', where: file, detail: 'found UTF-16, expected UTF-8' });
  }
  return a === 0xef && b === 0xbb && c === 0xbf ? 3 : 0;
}
