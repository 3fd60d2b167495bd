/** Decimal numbers read straight from the bytes of a text file: the hot path of recordings of gigabytes. */

const ZERO = 48;
const POINT = 46;
const COMMA = 44;
const MINUS = 45;
const PLUS = 43;

/** Powers of ten that a double holds exactly. */
const POWERS = Array.from({ length: 23 }, (_, power) => Number(`1e${power}`));

/** What people and programs write where there is no value, and for one that is no number. */
const ABSENT = new Set(['', '-', '--', 'na', 'n/a', '#n/a', 'null', 'none']);
const NOT_A_NUMBER = new Set(['nan', 'inf', '-inf', '+inf', 'infinity', '-infinity']);

/**
 * @param bytes text; the number is bytes[from .. to), spaces and quotes around it are passed over
 * @param decimalComma whether a comma is a decimal mark too
 * @returns the nearest double; NaN where it says so; undefined for an absent value; null for what is no number
 * @example decimalAt(new TextEncoder().encode('-0,125'), 0, 6, true) // -0.125
 */
export function decimalAt(
  bytes: Uint8Array,
  from: number,
  to: number,
  decimalComma: boolean,
): number | null | undefined {
  let at = from;
  let end = to;
  while (at < end && isAround(bytes[at]!)) at++;
  while (end > at && isAround(bytes[end - 1]!)) end--;
  const start = at;
  const negative = bytes[at] === MINUS;
  if (negative || bytes[at] === PLUS) at++;
  let mantissa = 0;
  let digits = 0;
  let decimals = 0;
  let marked = false;
  for (; at < end; at++) {
    const digit = bytes[at]! - ZERO;
    if (digit >= 0 && digit <= 9) {
      mantissa = mantissa * 10 + digit;
      digits++;
      if (marked) decimals++;
    } else if (!marked && (bytes[at] === POINT || (decimalComma && bytes[at] === COMMA))) marked = true;
    else return slowly(bytes, start, end, decimalComma);
  }
  // Both operands exact: one division, correctly rounded (Clinger 1990). Otherwise the platform's parser.
  if (digits === 0 || digits > 15 || decimals > 22) return slowly(bytes, start, end, decimalComma);
  const magnitude = mantissa / POWERS[decimals]!;
  return negative ? -magnitude : magnitude;
}

function slowly(bytes: Uint8Array, from: number, to: number, decimalComma: boolean): number | null | undefined {
  // No number is longer; a longer text would only be copied to be refused.
  if (to - from > 64) return null;
  let text = '';
  for (let at = from; at < to; at++) text += String.fromCharCode(bytes[at]!);
  if (ABSENT.has(text.toLowerCase())) return undefined;
  if (NOT_A_NUMBER.has(text.toLowerCase())) return NaN;
  if (decimalComma) text = text.replace(',', '.');
  return /^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$/.test(text) ? Number(text) : null;
}

/** Space, tab, quote. */
const isAround = (byte: number): boolean => byte === 32 || byte === 9 || byte === 34;
