import { polygon, type Point } from './pen.ts';

/**
 * Ballast as irregular stones of four or five corners, the same each time. Size follows the scale of the drawing.
 *
 * @returns path data between x0 and x1, y0 and y1, px
 */
export function seededStones(x0: number, x1: number, y0: number, y1: number, pxPerM: number): string {
  const random = generator(5);
  const step = Math.max(3.4, pxPerM * 0.165);
  let d = '';
  for (let y = y0 + step * 0.3; y < y1 - step * 0.15; y += step * 0.78) {
    for (let x = x0; x < x1; x += step) {
      const cx = x + (random() - 0.5) * step;
      const cy = y + (random() - 0.5) * step * 0.6;
      const r = step * (0.24 + 0.16 * random());
      const turn = random() * 2 * Math.PI;
      const corners = 4 + Math.floor(random() * 2);
      const stone: Point[] = [];
      for (let k = 0; k < corners; k++) {
        const angle = turn + (k * 2 * Math.PI) / corners + (random() - 0.5) * 0.5;
        const px = Math.min(x1, Math.max(x0, cx + r * 1.15 * Math.cos(angle)));
        stone.push([px, Math.min(y1, Math.max(y0, cy + r * 0.8 * Math.sin(angle)))]);
      }
      d += polygon(stone);
    }
  }
  return d;
}

/** Mulberry32, a small generator with a state of 32 bits; the drawing must not change from one time to the next. */
function generator(seed: number): () => number {
  let state = seed >>> 0;
  return () => {
    state = (state + 0x6d2b79f5) | 0;
    let t = Math.imul(state ^ (state >>> 15), 1 | state);
    t = (t + Math.imul(t ^ (t >>> 7), 61 | t)) ^ t;
    return ((t ^ (t >>> 14)) >>> 0) / 4_294_967_296;
  };
}
