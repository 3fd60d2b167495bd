/**
 * Seeded random numbers, one independent stream for each purpose, so that adding a sensor or an event does not change
 * what the others see. Generator sfc32 (C. Doty-Humphrey, PractRand), seeded through splitmix32 from a seed and a name.
 */
export class RandomStream {
  // plain private fields: the engine keeps them as machine numbers, `#` fields it does not
  private a: number;
  private b: number;
  private c: number;
  private count = 1;

  /**
   * @param seed any integer
   * @param name what the stream is for
   */
  constructor(seed: number, name: string) {
    const next = splitmix(hash(name) ^ Math.imul(seed, 0x9e3779b9));
    this.a = next();
    this.b = next();
    this.c = next() ^ Math.floor(seed / 2 ** 32);
    for (let i = 0; i < 12; i++) this.word();
  }

  /** 32 random bits as a signed integer. */
  word(): number {
    const sum = (((this.a + this.b) | 0) + this.count) | 0;
    this.count = (this.count + 1) | 0;
    this.a = this.b ^ (this.b >>> 9);
    this.b = (this.c + (this.c << 3)) | 0;
    this.c = (((this.c << 21) | (this.c >>> 11)) + sum) | 0;
    return sum;
  }

  /** Uniform in [low, high), 32 bits. */
  uniform(low = 0, high = 1): number {
    return low + ((high - low) * (this.word() >>> 0)) / 2 ** 32;
  }

  /** Whole number from low to high, both possible. */
  integer(low: number, high: number): number {
    return Math.floor(this.uniform(low, high + 1));
  }

  /** True with the given probability. */
  chance(probability: number): boolean {
    return this.uniform() < probability;
  }

  /** One of the items. */
  pick<T>(items: readonly T[]): T {
    const item = items[this.integer(0, items.length - 1)];
    if (item === undefined) throw new RangeError('nothing to pick from');
    return item;
  }

  /** Standard normal deviate: the ziggurat of G. Marsaglia and W. W. Tsang (2000) with 128 layers. */
  normal(): number {
    for (;;) {
      const word = this.word();
      const layer = word & 127;
      // bits 8 … 31 are the value, so that layer and value do not share bits
      const value = (word >> 8) * ZIGGURAT.width[layer]!;
      if (Math.abs(value) < ZIGGURAT.inside[layer]!) return value;
      if (layer === 0) return this.tail(value);
      const above = ZIGGURAT.height[layer]!;
      const below = ZIGGURAT.height[layer - 1]!;
      if (above + this.uniform() * (below - above) < Math.exp(-0.5 * value * value)) return value;
    }
  }

  /** The next deviates, as many as asked for, as single calls would give them; several times faster. */
  normals(into: Float64Array, count: number): void {
    const { width, inside } = ZIGGURAT;
    let { a, b, c, count: n } = this;
    for (let i = 0; i < count; i++) {
      const word = (((a + b) | 0) + n) | 0;
      const layer = word & 127;
      const value = (word >> 8) * width[layer]!;
      if (Math.abs(value) < inside[layer]!) {
        n = (n + 1) | 0;
        a = b ^ (b >>> 9);
        b = (c + (c << 3)) | 0;
        c = (((c << 21) | (c >>> 11)) + word) | 0;
        into[i] = value;
      } else {
        // one draw in about sixty: leave it to the careful way, from the same state
        this.a = a;
        this.b = b;
        this.c = c;
        this.count = n;
        into[i] = this.normal();
        ({ a, b, c, count: n } = this);
      }
    }
    this.a = a;
    this.b = b;
    this.c = c;
    this.count = n;
  }

  /** Beyond the last layer (Marsaglia 1964); the sign is that of the draw that led here. */
  private tail(side: number): number {
    for (;;) {
      const x = -Math.log(1 - this.uniform()) / EDGE;
      const y = -Math.log(1 - this.uniform());
      if (2 * y > x * x) return side < 0 ? -(EDGE + x) : EDGE + x;
    }
  }
}

/** Right edge of the ziggurat and area of each layer, for 128 layers. */
const EDGE = 3.442619855899;
const AREA = 9.91256303526217e-3;

const ZIGGURAT = ziggurat();

/** Layer 0 is the base strip with the tail; layers 1 … 127 go from the widest to the top. */
function ziggurat(): { width: Float64Array; inside: Float64Array; height: Float64Array } {
  const density = (x: number): number => Math.exp(-0.5 * x * x);
  const width = new Float64Array(128);
  const inside = new Float64Array(128);
  const height = new Float64Array(128);
  const unit = 2 ** -23;
  let right = EDGE;
  width[0] = (AREA / density(EDGE)) * unit;
  inside[0] = EDGE;
  height[0] = density(EDGE);
  for (let layer = 1; layer < 128; layer++) {
    // heights grow upwards, so `height` of a layer is that of its top edge
    const top = AREA / right + density(right);
    const next = top < 1 ? Math.sqrt(-2 * Math.log(top)) : 0;
    width[layer] = right * unit;
    inside[layer] = next;
    height[layer] = Math.min(1, top);
    right = next;
  }
  return { width, inside, height };
}

function splitmix(seed: number): () => number {
  let state = seed | 0;
  return () => {
    state = (state + 0x9e3779b9) | 0;
    let z = state ^ (state >>> 16);
    z = Math.imul(z, 0x21f0aaad);
    z ^= z >>> 15;
    z = Math.imul(z, 0x735a2d97);
    return z ^ (z >>> 15);
  };
}

/** FNV-1a, 32 bits. */
function hash(text: string): number {
  let h = 0x811c9dc5;
  for (let i = 0; i < text.length; i++) h = Math.imul(h ^ text.charCodeAt(i), 0x01000193);
  return h;
}
