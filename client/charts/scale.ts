/** A map from values to pixels and back. */
export interface Scale {
  (value: number): number;
  invert(pixel: number): number;
  readonly from: number;
  readonly to: number;
}

/** Straight-line scale: `from` lies at pixel `at`, `to` at pixel `end`. */
export function linear(from: number, to: number, at: number, end: number): Scale {
  const span = to - from || 1;
  return Object.assign((value: number) => at + ((value - from) / span) * (end - at), {
    invert: (pixel: number) => from + ((pixel - at) / (end - at || 1)) * span,
    from,
    to,
  });
}

/** Logarithmic scale; both ends above zero. Values at or below zero fall on the lower end. */
export function logarithmic(from: number, to: number, at: number, end: number): Scale {
  const span = Math.log(to / from) || 1;
  return Object.assign((value: number) => at + (Math.log(Math.max(value, from) / from) / span) * (end - at), {
    invert: (pixel: number) => from * Math.exp(((pixel - at) / (end - at || 1)) * span),
    from,
    to,
  });
}

/**
 * Round values between two ends, in steps of 1, 2 or 5 times a power of ten.
 *
 * @param aim how many are wanted, roughly
 * @example ticks(0, 4.2, 5) // [0, 1, 2, 3, 4]
 */
export function ticks(from: number, to: number, aim: number): number[] {
  if (!(to > from)) return [];
  const rough = (to - from) / Math.max(1, aim);
  const power = 10 ** Math.floor(Math.log10(rough));
  const step =
    [1, 2, 5, 10].map((factor) => factor * power).find((candidate) => candidate >= rough * 0.999) ?? power * 10;
  const digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
  const found: number[] = [];
  for (let k = Math.ceil(from / step - 1e-9); k * step <= to + step * 1e-9; k++)
    found.push(Number((k * step).toFixed(digits)));
  return found;
}

/**
 * Powers of ten between two ends, with 2 and 5 between them where there is room for them.
 *
 * @example logTicks(0.02, 3) // [0.02, 0.05, 0.1, 0.2, 0.5, 1, 2]
 */
export function logTicks(from: number, to: number, room = 8): number[] {
  const decades = Math.log10(to / from);
  const factors = decades * 3 <= room ? [1, 2, 5] : [1];
  const found: number[] = [];
  for (let power = Math.floor(Math.log10(from)); power <= Math.ceil(Math.log10(to)); power++) {
    for (const factor of factors) {
      const value = Number((factor * 10 ** power).toPrecision(3));
      if (value >= from * 0.9999 && value <= to * 1.0001) found.push(value);
    }
  }
  return found;
}

/**
 * The greatest of 1, 2, 5 times a power of ten that is not above a value, for scale bars.
 *
 * @example roundDown(4.2) // 2
 */
export function roundDown(value: number): number {
  const power = 10 ** Math.floor(Math.log10(value));
  const factor = [5, 2, 1].find((candidate) => candidate * power <= value * 1.0000001) ?? 1;
  return Number((factor * power).toPrecision(3));
}

/** Rows for labels along an axis, so that none runs into the one before it; they start at rising places. */
export function labelRows(labels: readonly { at: number; width: number }[]): number[] {
  const ends: number[] = [];
  return labels.map(({ at, width }) => {
    const free = ends.findIndex((end) => end < at);
    const row = free < 0 ? ends.length : free;
    ends[row] = at + width;
    return row;
  });
}
