/** Pieces of SVG path data, rounded to a tenth of a pixel. */

export type Point = readonly [x: number, y: number];

/** A figure of a drawing: path data and the classes of its pen (see style/drawing.css). */
export interface Figure {
  d: string;
  pen: string;
}

export const round = (value: number): number => Math.round(value * 10) / 10;

/** On the middle of a pixel, so that a hairline is one pixel wide. */
export const crisp = (value: number): number => Math.round(value) + 0.5;

export const line = (x1: number, y1: number, x2: number, y2: number): string =>
  `M${round(x1)} ${round(y1)}L${round(x2)} ${round(y2)}`;

export const box = (x: number, y: number, width: number, height: number): string =>
  `M${round(x)} ${round(y)}h${round(width)}v${round(height)}h${round(-width)}z`;

export const polyline = (points: readonly Point[]): string =>
  points.map(([x, y], i) => `${i === 0 ? 'M' : 'L'}${round(x)} ${round(y)}`).join('');

export const polygon = (points: readonly Point[]): string => `${polyline(points)}Z`;

export const circle = (x: number, y: number, r: number): string =>
  `M${round(x - r)} ${round(y)}a${round(r)} ${round(r)} 0 1 0 ${round(2 * r)} 0a${round(r)} ${round(r)} 0 1 0 ${round(-2 * r)} 0z`;

/** Closed arrowhead, eleven degrees to each side, its point at x, y, looking along `degrees` (0 is to the right). */
export function arrowhead(x: number, y: number, degrees: number, length = 8): string {
  const angle = (degrees * Math.PI) / 180;
  const half = 0.2;
  const back = (turn: number): Point => [x - length * Math.cos(angle + turn), y - length * Math.sin(angle + turn)];
  return polygon([[x, y], back(-half), back(half)]);
}

/** Horizontal dimension line with its arrowheads; outside where there is no room between. */
export function dimension(x1: number, x2: number, y: number): { lines: string; heads: string } {
  const [a, b] = x1 < x2 ? [x1, x2] : [x2, x1];
  if (b - a > 24) return { lines: line(a, y, b, y), heads: arrowhead(a, y, 180) + arrowhead(b, y, 0) };
  return {
    lines: line(a - 16, y, b + 16, y),
    heads: arrowhead(a, y, 0, 7) + arrowhead(b, y, 180, 7),
  };
}
