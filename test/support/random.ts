/**
 * Seeded random numbers for tests: xoshiro128** (Blackman and Vigna 2018) seeded by splitmix32, so that every run
 * of a test sees the same numbers on every machine.
 */
export interface Random {
  readonly seed: number;
  /** Uniform in [0, 1), 53 bits. */
  next(): number;
  /** Uniform in [low, high). */
  uniform(low: number, high: number): number;
  /** Whole number from low to high, both possible. */
  integer(low: number, high: number): number;
  /** Standard normal. */
  normal(): number;
  /** One of the items; throws on an empty list. */
  pick<T>(items: readonly T[]): T;
}

export function createRandom(seed: number): Random {
  const nextWord = createWords(seed);
  let spare: number | null = null;

  const next = (): number => ((nextWord() >>> 5) * 67_108_864 + (nextWord() >>> 6)) / 9_007_199_254_740_992;
  const integer = (low: number, high: number): number => low + Math.floor(next() * (high - low + 1));

  return {
    seed,
    next,
    uniform: (low, high) => low + next() * (high - low),
    integer,
    normal: () => {
      if (spare !== null) {
        const kept = spare;
        spare = null;
        return kept;
      }
      // Box and Muller 1958; 1 - next() is never zero.
      const radius = Math.sqrt(-2 * Math.log(1 - next()));
      const angle = 2 * Math.PI * next();
      spare = radius * Math.sin(angle);
      return radius * Math.cos(angle);
    },
    pick: (items) => {
      const item = items[integer(0, items.length - 1)];
      if (item === undefined) throw new RangeError('nothing to pick from');
      return item;
    },
  };
}

/** Standard normal noise of the given standard deviation. */
export function noise(random: Random, length: number, deviation = 1): Float64Array {
  const samples = new Float64Array(length);
  for (let i = 0; i < length; i++) samples[i] = deviation * random.normal();
  return samples;
}

/** Runs a body once per seed; a failure names the seed that caused it. */
export function forSeeds(seeds: readonly number[], body: (random: Random) => void): void {
  for (const seed of seeds) {
    try {
      body(createRandom(seed));
    } catch (cause) {
      throw new Error(`seed ${seed}: ${cause instanceof Error ? cause.message : String(cause)}`, { cause });
    }
  }
}

/** Whole numbers first, first + 1, …: the usual list of seeds. */
export function seedsFrom(first: number, count: number): number[] {
  return Array.from({ length: count }, (_, i) => first + i);
}

function createWords(seed: number): () => number {
  let mix = seed | 0;
  const splitmix = (): number => {
    mix = (mix + 0x9e3779b9) | 0;
    let z = mix ^ (mix >>> 16);
    z = Math.imul(z, 0x21f0aaad);
    z ^= z >>> 15;
    z = Math.imul(z, 0x735a2d97);
    return z ^ (z >>> 15);
  };
  let a = splitmix();
  let b = splitmix();
  let c = splitmix();
  let d = splitmix();
  const rotate = (x: number, k: number): number => (x << k) | (x >>> (32 - k));
  return () => {
    const word = Math.imul(rotate(Math.imul(b, 5), 7), 9);
    const shifted = b << 9;
    c ^= a;
    d ^= b;
    b ^= c;
    a ^= d;
    c ^= shifted;
    d = rotate(d, 11);
    return word >>> 0;
  };
}
