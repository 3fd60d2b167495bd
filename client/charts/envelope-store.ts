import type { Frame } from '#core/contract/frame.ts';
import type { Micros } from '#core/contract/time.ts';

/** A sensor's columns, newest over oldest: the number of the column tells which one holds a place. */
interface Ring {
  column: Float64Array;
  low: Float32Array;
  high: Float32Array;
}

/**
 * The last columns of the live envelopes, least and largest value each, outside all reactivity. A column that was never
 * written is missing, not zero. Memory is fixed by `capacity`; sensors beyond `SENSORS` are not kept.
 */
export class EnvelopeStore {
  readonly columnMicros: number;
  readonly capacity: number;
  /** Time of the end of the newest column of any sensor; 0 before the first. */
  newestMicros: Micros = 0;
  #rings = new Map<string, Ring>();

  constructor(columnMicros: number, capacity: number) {
    this.columnMicros = columnMicros;
    this.capacity = capacity;
  }

  /**
   * Takes a frame. Slow channels and the farther past come in wider columns: each fills all of the columns it covers.
   * Narrower ones, of an earlier wish, are merged.
   *
   * @returns whether anything was taken
   */
  take({ header, data }: Frame): boolean {
    if (header.kind !== 'live' || header.layout !== 'envelope') return false;
    let taken = false;
    for (const { sensor, startMicros, stepMicros, count, at } of header.channels) {
      const ring = this.#ring(sensor);
      if (!ring || !(stepMicros > 0)) continue;
      for (let i = 0; i < count; i++) {
        const low = data[at + 2 * i]!;
        if (Number.isNaN(low)) continue;
        this.#fill(ring, startMicros + i * stepMicros, stepMicros, low, data[at + 2 * i + 1]!);
        taken = true;
      }
      this.newestMicros = Math.max(this.newestMicros, startMicros + count * stepMicros);
    }
    return taken;
  }

  clear(): void {
    this.#rings.clear();
    this.newestMicros = 0;
  }

  sensors(): string[] {
    return [...this.#rings.keys()];
  }

  /** Number of the column that holds a time. */
  columnAt(micros: Micros): number {
    return Math.floor(micros / this.columnMicros);
  }

  /**
   * Copies `count` columns from number `first` as pairs of points for a plot: the one nearer to the point before comes
   * first, so that a slow wave is drawn as a line and a fast one as a band. Missing columns are two nulls.
   *
   * @param out at least 2 · count long, overwritten
   */
  trace(sensor: string, first: number, count: number, out: (number | null)[]): void {
    const ring = this.#rings.get(sensor);
    let before = 0;
    for (let i = 0; i < count; i++) {
      const place = placeOf(first + i, this.capacity);
      if (ring?.column[place] !== first + i) {
        out[2 * i] = out[2 * i + 1] = null;
        continue;
      }
      const low = ring.low[place]!;
      const high = ring.high[place]!;
      const rising = Math.abs(low - before) <= Math.abs(high - before);
      out[2 * i] = rising ? low : high;
      before = rising ? high : low;
      out[2 * i + 1] = before;
    }
  }

  /** Least and largest value of the columns, or null where none is there. */
  extremes(sensor: string, first: number, count: number): { low: number; high: number } | null {
    const ring = this.#rings.get(sensor);
    if (!ring) return null;
    let low = Infinity;
    let high = -Infinity;
    for (let i = first; i < first + count; i++) {
      const place = placeOf(i, this.capacity);
      if (ring.column[place] !== i) continue;
      low = Math.min(low, ring.low[place]!);
      high = Math.max(high, ring.high[place]!);
    }
    return low > high ? null : { low, high };
  }

  #fill(ring: Ring, startMicros: Micros, stepMicros: number, low: number, high: number): void {
    const first = Math.floor(startMicros / this.columnMicros);
    const end = Math.max(first + 1, Math.round((startMicros + stepMicros) / this.columnMicros));
    for (let column = Math.max(first, end - this.capacity); column < end; column++)
      this.#write(ring, column, low, high);
  }

  #write(ring: Ring, column: number, low: number, high: number): void {
    const place = placeOf(column, this.capacity);
    if (ring.column[place] === column) {
      // A column that was sent while it was still filling comes again; it can only have grown.
      ring.low[place] = Math.min(ring.low[place]!, low);
      ring.high[place] = Math.max(ring.high[place]!, high);
    } else if (!(ring.column[place]! > column)) {
      ring.column[place] = column;
      ring.low[place] = low;
      ring.high[place] = high;
    }
  }

  #ring(sensor: string): Ring | null {
    const found = this.#rings.get(sensor);
    if (found) return found;
    if (this.#rings.size >= SENSORS) return null;
    const ring = {
      column: new Float64Array(this.capacity).fill(-1),
      low: new Float32Array(this.capacity),
      high: new Float32Array(this.capacity),
    };
    this.#rings.set(sensor, ring);
    return ring;
  }
}

/** As many as a bridge may have. */
const SENSORS = 256;

const placeOf = (column: number, capacity: number): number => ((column % capacity) + capacity) % capacity;
