import type { Levels, Severity } from '#core/contract/severity.ts';
import { SEVERITIES } from '#core/contract/severity.ts';

/** Line types after ISO 128: dots, dashes, unbroken for AL, IL, IAL; chain for a natural frequency. */
export const DASHES: Readonly<Record<Severity | 'chain' | 'dash', readonly number[]>> = {
  AL: [3, 4],
  IL: [9, 4],
  IAL: [],
  chain: [14, 3, 2, 3],
  dash: [6, 3],
};

export interface LimitLine {
  severity: Severity;
  value: number;
}

/** The levels that are set, gravest first. */
export function limitLines(levels: Levels | undefined): LimitLine[] {
  if (!levels) return [];
  return SEVERITIES.toReversed().flatMap((severity) => {
    const value = levels[severity];
    return value === undefined ? [] : [{ severity, value }];
  });
}

/** Outline of a severity's lozenge about a point, as the data of an SVG path. */
export function lozengePath(x: number, y: number, r: number): string {
  return `M${x} ${y - r}L${x + r} ${y}L${x} ${y + r}L${x - r} ${y}Z`;
}

/** The part of a lozenge that is filled: nothing for AL, the lower half for IL, all for IAL. */
export function lozengeFill(x: number, y: number, r: number, severity: Severity): string {
  if (severity === 'AL') return '';
  return severity === 'IL' ? `M${x - r} ${y}L${x} ${y + r}L${x + r} ${y}Z` : lozengePath(x, y, r);
}

/** A lozenge on a canvas; its ground is `paper`. */
export function drawLozenge(
  context: CanvasRenderingContext2D | OffscreenCanvasRenderingContext2D,
  at: { x: number; y: number; r: number; severity: Severity },
  colours: { line: string; paper: string },
): void {
  const { x, y, r, severity } = at;
  const lower: [number, number][] = [
    [x - r, y],
    [x, y + r],
    [x + r, y],
  ];
  context.setLineDash([]);
  context.fillStyle = colours.paper;
  outline(context, [...lower, [x, y - r]]);
  context.fill();
  context.fillStyle = colours.line;
  context.strokeStyle = colours.line;
  if (severity === 'IAL') context.fill();
  context.stroke();
  if (severity !== 'IL') return;
  outline(context, lower);
  context.fill();
}

/** Drawn point by point: live strips draw a hundred of them a frame, and text of an SVG path is slow to read. */
function outline(context: CanvasPath & CanvasDrawPath, corners: readonly (readonly [number, number])[]): void {
  context.beginPath();
  for (const [x, y] of corners) context.lineTo(x, y);
  context.closePath();
}
