import type { Micros } from '#core/contract/time.ts';

/**
 * The moment that the live drawings show. Samples come in lumps, some late; the drawings run evenly behind the
 * server's clock by a little more than the latest lump was late, so that traces and axles move without jerks and
 * everything drawn at a moment is known.
 */
export class LiveClock {
  #server: () => Micros;
  #lagMicros = 0;
  #lags: { at: Micros; lag: number }[] = [];
  #newest: Micros = 0;
  #held: Micros | null = null;

  constructor(serverMicros: () => Micros) {
    this.#server = serverMicros;
  }

  /** Samples up to `newestMicros` have come. */
  arrived(newestMicros: Micros): void {
    const now = this.#server();
    if (newestMicros <= this.#newest) return;
    // Just before this lump, the newest sample was this old.
    if (this.#newest > 0) this.#lags.push({ at: now, lag: now - this.#newest });
    this.#newest = newestMicros;
    this.#lags = this.#lags.filter(({ at, lag }) => now - at < REMEMBERED_MICROS && lag < LONGEST_LAG_MICROS);
    const wanted = Math.max(now - newestMicros, ...this.#lags.map(({ lag }) => lag)) + SPARE_MICROS;
    const bounded = Math.min(LONGEST_LAG_MICROS, Math.max(0, wanted));
    // Behind at once where it must be, nearer again only slowly.
    this.#lagMicros = bounded > this.#lagMicros ? bounded : this.#lagMicros + (bounded - this.#lagMicros) * 0.02;
  }

  now(): Micros {
    return this.#held ?? this.#server() - this.#lagMicros;
  }

  get lagMicros(): number {
    return this.#lagMicros;
  }

  get held(): boolean {
    return this.#held !== null;
  }

  hold(on: boolean): void {
    this.#held = on ? this.now() : null;
  }
}

const REMEMBERED_MICROS = 5_000_000;
const LONGEST_LAG_MICROS = 2_500_000;
const SPARE_MICROS = 40_000;
