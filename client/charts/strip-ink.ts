import type uPlot from 'uplot';
import type { Micros } from '#core/contract/time.ts';
import { acceleration, fixed, plural } from '../format.ts';
import { clockIn, zoneWord } from '../time.ts';
import type { Ink } from './ink.ts';
import { DASHES, drawLozenge } from './limit-line.ts';
import { ticks } from './scale.ts';
import type { Lane } from './strip-layout.ts';

export interface LanePeak {
  sensor: string;
  /** Largest magnitude, or null where there is no sample. */
  peak: number | null;
  low: number;
  high: number;
}

/** All that one redraw of the strips needs. */
export interface StripFrame {
  ink: Ink;
  ratio: number;
  lanes: readonly Lane[];
  ranges: { low: number; high: number }[];
  /** Two points a column, as plotted. */
  traces: readonly (readonly (number | null)[])[];
  peaks: readonly LanePeak[];
  /** From when the peaks are the largest; null for the window shown. */
  peaksFromMicros: Micros | null;
  firstColumn: number;
  columnMicros: number;
  count: number;
  edge: Micros;
  windowMicros: number;
  newestMicros: Micros;
  /** Counted of the train; null where they were not all seen. */
  axles: number | null;
  zone: string;
  still: StillLayer;
}

/** What stays while lanes and ranges stay, drawn once: dashed limits, scales and names take longer than the traces. */
export interface StillLayer {
  key: string;
  canvas: OffscreenCanvas | null;
}

interface Sheet {
  context: CanvasRenderingContext2D | OffscreenCanvasRenderingContext2D;
  left: number;
  right: number;
  bottom: number;
  width: number;
  x: (micros: Micros) => number;
  y: (lane: number, value: number) => number;
}

function sheetOf(u: uPlot, frame: StripFrame, context: Sheet['context'] = u.ctx): Sheet {
  const { ratio, edge, windowMicros } = frame;
  const left = u.bbox.left / ratio;
  const width = u.bbox.width / ratio;
  return {
    context,
    left,
    right: left + width,
    bottom: (u.bbox.top + u.bbox.height) / ratio,
    width: u.width,
    x: (micros) => left + ((micros - (edge - windowMicros)) / windowMicros) * width,
    y: (index, value) => {
      const lane = frame.lanes[index]!;
      const { low, high } = frame.ranges[index]!;
      return lane.top + ((high - value) / (high - low)) * lane.height;
    },
  };
}

/** Grid, places without samples, and all that stays, under the traces. */
export function drawBehind(u: uPlot, frame: StripFrame): void {
  const sheet = sheetOf(u, frame);
  const { context, left, right, bottom } = sheet;
  const { ink, ratio } = frame;
  context.save();
  context.scale(ratio, ratio);
  context.lineWidth = 0.7;
  context.strokeStyle = ink.grid;
  for (const at of seconds(frame, right - left)) stroke(context, sheet.x(at), 4, sheet.x(at), bottom);
  frame.lanes.forEach((_, i) => drawGaps(sheet, frame, i));
  context.restore();
  const still = stillOf(u, frame);
  if (still !== null) context.drawImage(still, 0, 0);
}

/** The layer as it is, or drawn anew where something of it has changed; null where there is no place to draw it. */
function stillOf(u: uPlot, frame: StripFrame): OffscreenCanvas | null {
  const { still, ink, ratio, lanes, ranges } = frame;
  const { width, height } = u.ctx.canvas;
  const named = lanes.map(({ sensor, top }) => [sensor.id, top]);
  const fonts = document.fonts.check(`12px ${ink.narrow}`);
  const key = JSON.stringify([width, height, ratio, named, ranges, ink, fonts]);
  if (key === still.key) return still.canvas;
  const canvas = new OffscreenCanvas(width, height);
  const context = canvas.getContext('2d');
  if (context === null) return null;
  context.scale(ratio, ratio);
  context.lineJoin = 'round';
  drawStill(sheetOf(u, frame, context), frame);
  still.key = key;
  still.canvas = canvas;
  return canvas;
}

/** Ticks and limits across the lanes; scales, names and marks of limits in the margins. */
function drawStill(sheet: Sheet, frame: StripFrame): void {
  const { context, left, right } = sheet;
  const { ink } = frame;
  const narrow = sheet.width < 560;
  const write = writer(context, ink);
  const labelled = frame.lanes.findIndex(({ limits }) => limits.length > 0);
  frame.lanes.forEach((lane, i) => {
    context.lineWidth = 0.7;
    for (const tick of yTicks(frame, i)) {
      context.strokeStyle = tick === 0 ? ink.rule : ink.grid;
      stroke(context, left, sheet.y(i, tick), right, sheet.y(i, tick));
    }
    context.strokeStyle = ink.ink3;
    for (const { severity, value } of lane.limits) {
      context.setLineDash([...DASHES[severity]]);
      for (const sign of [1, -1]) stroke(context, left, sheet.y(i, sign * value), right, sheet.y(i, sign * value));
    }
    context.setLineDash([]);
    drawAxis(sheet, frame, i, write);
    drawName(sheet, lane, ink, write, narrow);
    if (lane.kind === 'acceleration') drawLimitMarks(sheet, frame, i, i === labelled && !narrow, write);
  });
}

/** What is above the alert limit, peaks and times, over the traces. */
export function drawOver(u: uPlot, frame: StripFrame): void {
  const sheet = sheetOf(u, frame);
  const { context, left, right, bottom } = sheet;
  const { ink, ratio } = frame;
  const narrow = sheet.width < 560;
  const write = writer(context, ink);
  context.save();
  context.scale(ratio, ratio);
  context.lineJoin = 'round';
  const labelled = frame.lanes.findIndex(({ limits }) => limits.length > 0);
  frame.lanes.forEach((lane, i) => {
    drawAbove(sheet, frame, i);
    if (lane.kind === 'acceleration') drawPeak(sheet, frame, i, i === labelled && !narrow, write);
    else drawCount(sheet, frame, i, write);
  });
  context.strokeStyle = ink.edge;
  context.lineWidth = 0.95;
  stroke(context, left, bottom, right, bottom);
  drawTimes(sheet, frame, write);
  context.strokeStyle = ink.ink;
  context.lineWidth = 1.35;
  stroke(context, right, 0, right, bottom);
  context.restore();
}

type Write = (
  text: string,
  x: number,
  y: number,
  colour: string,
  align?: CanvasTextAlign,
  weight?: number,
  size?: number,
) => void;

function writer(context: Sheet['context'], ink: Ink): Write {
  context.textBaseline = 'alphabetic';
  return (text, x, y, colour, align = 'left', weight = 400, size = 12) => {
    context.font = `${weight} ${size}px ${ink.narrow}`;
    context.fillStyle = colour;
    context.textAlign = align;
    context.fillText(text, x, y);
  };
}

function yTicks(frame: StripFrame, index: number): number[] {
  const lane = frame.lanes[index]!;
  const { low, high } = frame.ranges[index]!;
  if (lane.kind !== 'acceleration') return ticks(0, high, 1.6);
  // A figure at the very edge would run into that of the next lane.
  return ticks(low, high, Math.max(4.6, lane.height / 20)).filter((tick) => Math.abs(tick) < high * 0.93);
}

function drawAxis(sheet: Sheet, frame: StripFrame, index: number, write: Write): void {
  const { context, left } = sheet;
  const lane = frame.lanes[index]!;
  context.strokeStyle = frame.ink.edge;
  context.lineWidth = 0.95;
  stroke(context, left - 0.5, lane.top, left - 0.5, lane.top + lane.height);
  const digits = Math.max(0, ...yTicks(frame, index).map((tick) => (String(tick).split('.')[1] ?? '').length));
  for (const tick of yTicks(frame, index)) {
    const y = sheet.y(index, tick);
    stroke(context, left - 4, y, left, y);
    write(fixed(tick, digits), left - 8, y + 4, frame.ink.ink3, 'right');
  }
}

/** Balloon, place and unit, as on the long section. */
function drawName(sheet: Sheet, lane: Lane, ink: Ink, write: Write, narrow: boolean): void {
  const { context } = sheet;
  const middle = lane.top + lane.height / 2;
  context.font = `500 11.5px ${ink.narrow}`;
  const half = Math.max(10.5, (context.measureText(lane.sensor.id).width + 9) / 2);
  context.beginPath();
  context.roundRect(1, middle - 10.5, 2 * half, 21, 10.5);
  context.fillStyle = ink.paper;
  context.fill();
  context.strokeStyle = ink.ink;
  context.lineWidth = 0.95;
  context.stroke();
  write(lane.sensor.id, 1 + half, middle + 4, ink.ink, 'center', 500, 11.5);
  if (narrow) return;
  write(lane.place, 2 * half + 7, middle - 1, ink.ink);
  write(lane.unit, 2 * half + 7, middle + 13, ink.ink3);
}

/** The part of a trace that is beyond the alert limit, in signal. */
function drawAbove(sheet: Sheet, frame: StripFrame, index: number): void {
  const lane = frame.lanes[index]!;
  const mildest = lane.limits[lane.limits.length - 1]?.value;
  const trace = frame.traces[index];
  if (mildest === undefined || !trace || !((frame.peaks[index]?.peak ?? 0) > mildest)) return;
  const { context } = sheet;
  context.strokeStyle = frame.ink.signal;
  context.lineWidth = 1.9;
  // One path: under a train there are thousands of them, and a stroke each would take the frame.
  context.beginPath();
  for (let i = 0; i < 2 * frame.count; i++) {
    const value = trace[i];
    if (value == null || Math.abs(value) <= mildest) continue;
    const x = sheet.x((frame.firstColumn + Math.floor(i / 2) + (i % 2 === 0 ? 0.25 : 0.75)) * frame.columnMicros);
    if (x < sheet.left || x > sheet.right) continue;
    context.moveTo(x, sheet.y(index, Math.sign(value) * mildest));
    context.lineTo(x, sheet.y(index, value));
  }
  context.stroke();
}

function drawLimitMarks(sheet: Sheet, frame: StripFrame, index: number, named: boolean, write: Write): void {
  const { context, right } = sheet;
  const { ink } = frame;
  const lane = frame.lanes[index]!;
  lane.limits.forEach(({ severity, value }, k) => {
    const y = sheet.y(index, value);
    if (!named) {
      context.lineWidth = 0.95;
      drawLozenge(context, { x: right + 8, y, r: 3.2, severity }, { line: ink.ink, paper: ink.paper });
      return;
    }
    const at = lane.top + 3 + k * 13;
    context.strokeStyle = ink.ink3;
    context.lineWidth = 0.7;
    stroke(context, right + 3, y, right + 13, at);
    context.lineWidth = 1.35;
    drawLozenge(context, { x: right + 19, y: at, r: 4.5, severity }, { line: ink.ink, paper: ink.paper });
    write(`${severity} ${acceleration(value)}`, right + 28, at + 4, ink.ink2);
  });
}

/** Peak so far, and how far it is from the limit it is nearest to; gravest passed one where it is above any. */
function drawPeak(sheet: Sheet, frame: StripFrame, index: number, named: boolean, write: Write): void {
  const lane = frame.lanes[index]!;
  const peak = frame.peaks[index]?.peak ?? null;
  const right = sheet.width - 2;
  const y = lane.top + lane.height / 2 + (named ? 15 : 0);
  if (peak === null) {
    write('no data', right, y + 4, frame.ink.signal, 'right', 600, 13);
    return;
  }
  const passed = lane.limits.find(({ value }) => peak > value);
  const mildest = lane.limits[lane.limits.length - 1];
  write(`${acceleration(peak)} m/s²`, right, y, passed ? frame.ink.signal : frame.ink.ink, 'right', 600, 13);
  if (passed) {
    write(
      `${acceleration(peak - passed.value)} above ${passed.severity}`,
      right,
      y + 15,
      frame.ink.signal,
      'right',
      500,
    );
  } else if (mildest) {
    write(`${acceleration(mildest.value - peak)} below ${mildest.severity}`, right, y + 15, frame.ink.ink2, 'right');
  } else write('no limit set', right, y + 15, frame.ink.ink2, 'right');
}

function drawCount(sheet: Sheet, frame: StripFrame, index: number, write: Write): void {
  const lane = frame.lanes[index]!;
  const peak = frame.peaks[index];
  const right = sheet.width - 2;
  const y = lane.top + lane.height / 2 + 5;
  if (!peak || peak.peak === null) write('no data', right, y, frame.ink.signal, 'right', 600, 13);
  else if (lane.kind === 'axles') {
    if (frame.axles !== null && frame.axles > 0) {
      write(plural(frame.axles, 'axle'), right, y, frame.ink.ink, 'right', 600, 13);
    } else write(frame.axles === null ? 'no count' : 'no axles', right, y, frame.ink.ink2, 'right');
  } else write(`${fixed(peak.peak, 2)} ${lane.unit}`, right, y, frame.ink.ink, 'right', 600, 13);
}

/** Stretches without samples, hatched; those still awaited at the right edge are not. */
function drawGaps(sheet: Sheet, frame: StripFrame, index: number): void {
  const trace = frame.traces[index];
  if (!trace || frame.count === 0) return;
  const lane = frame.lanes[index]!;
  const least = Math.max(3, Math.ceil(60_000 / frame.columnMicros));
  const time = (column: number): number => sheet.x((frame.firstColumn + column) * frame.columnMicros);
  let from = -1;
  for (let i = 0; i <= frame.count; i++) {
    const missing = i < frame.count && trace[2 * i] == null;
    if (missing && from < 0) from = i;
    if (missing || from < 0) continue;
    const awaited =
      i === frame.count && (frame.firstColumn + from) * frame.columnMicros >= frame.newestMicros - frame.columnMicros;
    const late = frame.edge - frame.newestMicros > 1_500_000;
    if (i - from >= least && (!awaited || late)) {
      hatch(sheet, frame.ink, Math.max(sheet.left, time(from)), Math.min(sheet.right, time(i)), lane);
    }
    from = -1;
  }
}

function hatch({ context }: Sheet, ink: Ink, a: number, b: number, { top, height }: Lane): void {
  if (b - a < 2) return;
  context.save();
  context.beginPath();
  context.rect(a, top, b - a, height);
  context.clip();
  context.strokeStyle = ink.rule;
  context.lineWidth = 0.7;
  context.beginPath();
  for (let x = a - height - ((a - height) % 9); x < b; x += 9) {
    context.moveTo(x, top + height);
    context.lineTo(x + height, top);
  }
  context.stroke();
  if (b - a > 70) {
    const middle = (a + b) / 2;
    context.fillStyle = ink.paper;
    context.fillRect(middle - 26, top + height / 2 - 9, 52, 18);
    context.font = `500 12px ${ink.narrow}`;
    context.fillStyle = ink.ink;
    context.textAlign = 'center';
    context.fillText('no data', middle, top + height / 2 + 4);
  }
  context.restore();
}

/** Round seconds in the window, far enough apart for their figures. */
function seconds({ edge, windowMicros }: StripFrame, width: number): Micros[] {
  const step = ([1, 2, 5, 10, 15, 30].find((s) => (s * 1e6 * width) / windowMicros >= 64) ?? 60) * 1e6;
  const found: Micros[] = [];
  for (let at = Math.ceil((edge - windowMicros) / step) * step; at <= edge; at += step) found.push(at);
  return found;
}

function drawTimes(sheet: Sheet, frame: StripFrame, write: Write): void {
  const { context, left, right, bottom } = sheet;
  const { ink } = frame;
  context.strokeStyle = ink.edge;
  context.lineWidth = 0.95;
  for (const at of seconds(frame, right - left)) {
    const x = sheet.x(at);
    stroke(context, x, bottom, x, bottom + 5);
    if (x > left + 20 && x < right - 34) write(clockIn(at, frame.zone).slice(3), x, bottom + 17, ink.ink3, 'center');
  }
  write('now', right, bottom + 17, ink.ink, 'center', 600);
  write(zoneWord(frame.zone), right + 18, bottom + 17, ink.ink3);
  // The figures beside the lanes say since when they are the largest.
  if (sheet.width >= 560) write(peaksSince(frame), sheet.width - 2, bottom + 17, ink.ink3, 'right');
}

/** `largest in 12 s`, or `since 15:01:05` while a passage is on. */
function peaksSince({ peaksFromMicros, windowMicros, zone }: StripFrame): string {
  return peaksFromMicros === null ? `largest in ${windowMicros / 1e6} s` : `since ${clockIn(peaksFromMicros, zone)}`;
}

function stroke(context: Sheet['context'], x1: number, y1: number, x2: number, y2: number): void {
  context.beginPath();
  context.moveTo(x1, y1);
  context.lineTo(x2, y2);
  context.stroke();
}
