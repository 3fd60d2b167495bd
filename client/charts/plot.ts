import uPlot from 'uplot';
import type { Severity } from '#core/contract/severity.ts';
import { onThemeChange, readInk, type Ink } from './ink.ts';
import { DASHES, drawLozenge, type LimitLine } from './limit-line.ts';
import { labelRows, logTicks, ticks } from './scale.ts';

/** A plot with one horizontal axis. Values are plain arrays with `null` where there is no value. */
export interface PlotSpec {
  x: { values: readonly number[]; title: string; digits: number; from: number; to: number };
  y: {
    title: string;
    digits: number;
    unit: string;
    from: number;
    to: number;
    log?: boolean;
    /** Strips of the same scale, one above the other; one unless said. */
    lanes?: number;
  };
  series: PlotSeries[];
  /** Limits drawn across, at plus and minus where `both`. */
  limits?: { lines: LimitLine[]; both: boolean };
  /** Chain lines drawn upright, natural frequencies for instance. */
  uprights?: { at: number; label: string }[];
  shades?: { from: number; to: number; label: string; strength: number }[];
  marks?: { x: number; y: number; severity: Severity | null; label: string }[];
}

export interface PlotSeries {
  label: string;
  values: readonly (number | null)[];
  colour: 'ink' | 'ink2' | 'ink3' | 'signal' | 'select';
  width: number;
  dash?: readonly number[];
  /** Circles only, or a line with circles. */
  circles?: boolean;
  /** Not in the read-out: it repeats a part of another series. */
  silent?: boolean;
  /** Written at the right end of the trace. */
  tag?: string;
  /** Strip it is drawn in, from the top; the first unless said. */
  lane?: number;
}

export interface PlotReport {
  /** Sample under the cursor, or null. */
  cursor(index: number | null): void;
  zoomed(is: boolean): void;
}

export interface Plot {
  update(spec: PlotSpec): void;
  reset(): void;
  /** Below one zooms in, above one out, about the cursor or the middle. */
  zoom(factor: number): void;
  /** Moves the cursor by pixels. */
  step(pixels: number): void;
  /** Takes the cursor away. */
  leave(): void;
  readonly canvas: HTMLCanvasElement;
  destroy(): void;
}

/** Puts a plot into an element; it follows the element's width and the theme until destroyed. */
export function mountPlot(host: HTMLElement, first: PlotSpec, height: number, report: PlotReport): Plot {
  let spec = first;
  let ink = readInk(host);
  const colours = (): Ink => ink;
  const current = (): PlotSpec => spec;
  let plot = build(host, current, colours, height, report);

  const size = new ResizeObserver(() => {
    const width = host.clientWidth;
    if (width > 0 && width !== plot.width) plot.setSize({ width, height });
  });
  size.observe(host);
  const endTheme = onThemeChange(() => {
    ink = readInk(host);
    plot.redraw(false);
  });

  // Letters drawn before their type had arrived are drawn again.
  const lettered = (): void => plot.redraw(false);
  document.fonts.addEventListener('loadingdone', lettered);

  const reset = (): void => {
    plot.setScale('x', { min: spec.x.from, max: spec.x.to });
  };
  return {
    update(next) {
      if (next === spec) return;
      const sameShape = next.series.length === spec.series.length && next.y.log === spec.y.log;
      spec = next;
      if (sameShape) {
        plot.setData(dataOf(spec), false);
        reset();
      } else {
        plot.destroy();
        plot = build(host, current, colours, height, report);
      }
    },
    reset,
    zoom(factor) {
      const { min, max } = plot.scales['x'] ?? {};
      if (min == null || max == null) return;
      const left = plot.cursor.left ?? -1;
      const about = left >= 0 ? plot.posToVal(left, 'x') : (min + max) / 2;
      plot.setScale('x', within(spec, about - (about - min) * factor, about + (max - about) * factor));
    },
    step(pixels) {
      const left = plot.cursor.left ?? -1;
      const width = plot.over.clientWidth;
      plot.setCursor({
        left: left < 0 ? width / 2 : Math.max(0, Math.min(width, left + pixels)),
        top: plot.over.clientHeight / 2,
      });
    },
    leave() {
      plot.setCursor({ left: -10, top: -10 });
    },
    get canvas() {
      return plot.ctx.canvas;
    },
    destroy() {
      size.disconnect();
      endTheme();
      document.fonts.removeEventListener('loadingdone', lettered);
      plot.destroy();
    },
  };
}

function within(spec: PlotSpec, min: number, max: number): { min: number; max: number } {
  return { min: Math.max(spec.x.from, min), max: Math.min(spec.x.to, max) };
}

function dataOf(spec: PlotSpec): uPlot.AlignedData {
  const columns = spec.series.map((series) => {
    const down = laneOffset(spec, series.lane ?? 0);
    if (down === 0) return series.values as (number | null)[];
    return series.values.map((value) => (value === null ? null : value - down));
  });
  return [spec.x.values as number[], ...columns];
}

/** How far a lane lies below the first one, in units of the vertical axis. */
const laneOffset = ({ y }: PlotSpec, lane: number): number => lane * (y.to - y.from);

const lanesOf = ({ y }: PlotSpec): number[] => Array.from({ length: y.lanes ?? 1 }, (_, lane) => lane);

const RIGHT_OF_LIMITS = 66;
// eslint-disable-next-line @typescript-eslint/no-unsafe-enum-assignment -- uPlot's const enum cannot be read by erasable syntax
const LOGARITHMIC: uPlot.Scale.Distr.Logarithmic = 3;

function build(host: HTMLElement, spec: () => PlotSpec, ink: () => Ink, height: number, report: PlotReport): uPlot {
  const type = `12px ${ink().narrow}`;
  const ratio = (): number => devicePixelRatio;
  const axis = {
    font: type,
    stroke: () => ink().ink3,
    grid: { stroke: () => ink().grid, width: 0.7 },
    ticks: { stroke: () => ink().edge, width: 0.95, size: 5 },
    border: { show: true, stroke: () => ink().edge, width: 0.95 },
  };
  const options: uPlot.Options = {
    width: host.clientWidth || 300,
    height,
    legend: { show: false },
    padding: [spec().shades || spec().uprights ? 20 : 22, spec().limits?.lines.length ? RIGHT_OF_LIMITS : 8, 16, 0],
    scales: {
      x: { time: false, range: (_u, min, max) => [min, max] },
      y: {
        range: () => [spec().y.from - laneOffset(spec(), lanesOf(spec()).length - 1), spec().y.to],
        ...(spec().y.log ? { distr: LOGARITHMIC, log: 10 as const } : {}),
      },
    },
    axes: [
      {
        ...axis,
        size: 28,
        splits: (u, _i, min, max) => ticks(min, max, u.width / 70),
        values: (_u, splits) => splits.map(plain),
      },
      {
        ...axis,
        size: 42,
        splits: (u, _i, min, max) => {
          const { y } = spec();
          if (y.log) return logTicks(min, max, u.height / 22);
          const lanes = lanesOf(spec());
          return lanes
            .flatMap((lane) =>
              ticks(y.from, y.to, u.height / lanes.length / 30).map((tick) => tick - laneOffset(spec(), lane)),
            )
            .toSorted((a, b) => a - b);
        },
        // uPlot would thin the figures of a logarithmic axis once more.
        filter: (_u, splits) => splits,
        values: (_u, splits) => splits.map((split) => plain(inLane(spec(), split))),
      },
    ],
    series: [{}, ...spec().series.map((series, i) => seriesOf(series, i, spec, ink))],
    cursor: {
      y: false,
      drag: { x: true, y: false, setScale: true },
      points: { size: 7, width: 1.4, fill: () => ink().paper },
      bind: {
        // A double click resets to the plot's own range, not to that of the data.
        dblclick: (u) => () => {
          u.setScale('x', { min: spec().x.from, max: spec().x.to });
          return null;
        },
      },
    },
    hooks: {
      drawClear: [(u) => drawShades(u, spec(), ink())],
      draw: [(u) => drawOver(u, spec(), ink(), ratio())],
      setCursor: [(u) => report.cursor((u.cursor.left ?? -1) < 0 ? null : (u.cursor.idx ?? null))],
      setScale: [
        (u, key) => {
          if (key !== 'x') return;
          const { min, max } = u.scales['x'] ?? {};
          const whole = spec().x.to - spec().x.from;
          report.zoomed(min != null && max != null && max - min < whole * 0.999);
        },
      ],
    },
  };
  const plot = new uPlot(options, dataOf(spec()), host);
  plot.setScale('x', { min: spec().x.from, max: spec().x.to });
  return plot;
}

function seriesOf(series: PlotSeries, index: number, spec: () => PlotSpec, ink: () => Ink): uPlot.Series {
  const colour = (): string => ink()[(spec().series[index] ?? series).colour];
  return {
    label: series.label,
    stroke: colour,
    width: series.width,
    ...(series.dash ? { dash: [...series.dash] } : {}),
    spanGaps: false,
    points: { show: series.circles === true, size: 6, width: 1.35, stroke: colour, fill: () => ink().paper },
  };
}

function drawShades(u: uPlot, { shades }: PlotSpec, ink: Ink): void {
  const { left, top, width, height } = u.bbox;
  const context = u.ctx;
  for (const { from, to, strength } of shades ?? []) {
    const a = Math.max(left, u.valToPos(from, 'x', true));
    const b = Math.min(left + width, u.valToPos(to, 'x', true));
    if (b <= a) continue;
    context.save();
    context.globalAlpha = strength;
    context.fillStyle = ink.tint;
    context.fillRect(a, top - 16 * devicePixelRatio, b - a, height + 16 * devicePixelRatio);
    context.restore();
  }
}

function drawOver(u: uPlot, spec: PlotSpec, ink: Ink, ratio: number): void {
  const context = u.ctx;
  context.save();
  context.scale(ratio, ratio);
  const box = {
    left: u.bbox.left / ratio,
    top: u.bbox.top / ratio,
    right: (u.bbox.left + u.bbox.width) / ratio,
    bottom: (u.bbox.top + u.bbox.height) / ratio,
  };
  const x = (value: number): number => u.valToPos(value, 'x', true) / ratio;
  const y = (value: number): number => u.valToPos(value, 'y', true) / ratio;
  const write: Write = (text, at, colour, align, weight = 400, halo = false) => {
    context.font = `${weight} 12px ${ink.narrow}`;
    context.fillStyle = colour;
    context.textAlign = align;
    if (halo) {
      context.strokeStyle = ink.paper;
      context.lineWidth = 5;
      context.lineJoin = 'round';
      context.strokeText(text, at[0], at[1]);
    }
    context.fillText(text, at[0], at[1]);
  };
  context.textBaseline = 'alphabetic';

  write(spec.x.title, [box.right, box.bottom + 40], ink.ink2, 'right');
  write(spec.y.title, [0, box.top - 9], ink.ink2, 'left');

  for (const { from, to, label } of spec.shades ?? []) {
    const a = Math.max(box.left, x(from));
    const room = Math.min(box.right, x(to)) - a;
    context.font = `500 12px ${ink.narrow}`;
    if (room > context.measureText(label).width + 12) write(label, [a + 8, box.top - 4], ink.ink, 'left', 500);
  }

  context.lineWidth = 0.95;
  const lines = spec.limits?.lines ?? [];
  lines.forEach(({ severity, value }, i) => {
    context.strokeStyle = ink.ink3;
    context.setLineDash([...DASHES[severity]]);
    for (const lane of lanesOf(spec)) {
      for (const sign of spec.limits?.both ? [1, -1] : [1]) {
        const at = y(sign * value - laneOffset(spec, lane));
        line(context, box.left, at, box.right, at);
      }
    }
    const at = Math.max(box.top + 4 + i * 14, Math.min(y(value), box.bottom - (lines.length - 1 - i) * 14));
    context.setLineDash([]);
    context.lineWidth = 0.7;
    line(context, box.right + 2, y(value), box.right + 10, at);
    context.lineWidth = 1.35;
    drawLozenge(context, { x: box.right + 16, y: at, r: 4.5, severity }, { line: ink.ink, paper: ink.paper });
    context.lineWidth = 0.95;
    write(`${severity} ${value.toFixed(2)}`, [box.right + 25, at + 4], ink.ink2, 'left');
  });

  const uprights = (spec.uprights ?? []).toSorted((a, b) => a.at - b.at);
  context.font = `500 12px ${ink.narrow}`;
  const rows = labelRows(
    uprights.map(({ at, label }) => ({ at: x(at), width: context.measureText(label).width + 12 })),
  );
  for (const [i, { at, label }] of uprights.entries()) {
    const px = x(at);
    if (px < box.left || px > box.right) continue;
    context.strokeStyle = ink.ink;
    context.lineWidth = 0.7;
    context.setLineDash([...DASHES.chain]);
    line(context, px, box.top - 4, px, box.bottom);
    // At the right edge the words stand before their line.
    const before = px + 5 + context.measureText(label).width > box.right;
    write(label, [before ? px - 5 : px + 5, box.top + 6 + 14 * rows[i]!], ink.ink, before ? 'right' : 'left', 500);
  }

  context.setLineDash([]);
  for (const mark of spec.marks ?? []) drawMark(context, mark, x(mark.x), y(mark.y), box, ink, write);
  for (const series of spec.series) tagSeries(u, spec, series, x, y, box, write, ink);
  context.restore();
}

interface Box {
  left: number;
  right: number;
  top: number;
  bottom: number;
}
/** With a halo, the words stay legible where lines cross them. */
type Write = (
  text: string,
  at: [number, number],
  colour: string,
  align: CanvasTextAlign,
  weight?: number,
  halo?: boolean,
) => void;

function drawMark(
  context: CanvasRenderingContext2D,
  mark: { severity: Severity | null; label: string },
  px: number,
  py: number,
  box: Box,
  ink: Ink,
  write: Write,
): void {
  if (px < box.left - 1 || px > box.right + 1) return;
  context.lineWidth = 1.35;
  const colour = mark.severity ? ink.signal : ink.ink;
  if (mark.severity)
    drawLozenge(context, { x: px, y: py, r: 6, severity: mark.severity }, { line: colour, paper: ink.paper });
  else {
    context.beginPath();
    context.arc(px, py, 3.2, 0, 7);
    context.fillStyle = ink.paper;
    context.fill();
    context.strokeStyle = colour;
    context.stroke();
  }
  const right = px < box.right - 60;
  write(mark.label, [px + (right ? 12 : -12), py + 4], colour, right ? 'left' : 'right', 600, true);
}

/** The name of a trace over its right end. */
function tagSeries(
  u: uPlot,
  spec: PlotSpec,
  series: PlotSeries,
  x: (value: number) => number,
  y: (value: number) => number,
  box: Box,
  write: Write,
  ink: Ink,
): void {
  if (!series.tag) return;
  const max = u.scales['x']?.max ?? spec.x.to;
  let last = series.values.length - 1;
  while (last > 0 && (series.values[last] == null || spec.x.values[last]! > max)) last--;
  const value = series.values[last];
  if (value == null) return;
  const at = Math.max(box.top + 10, Math.min(box.bottom - 6, y(value - laneOffset(spec, series.lane ?? 0)) - 12));
  const right = Math.min(box.right, x(spec.x.values[last]!)) - 2;
  write(series.tag, [right, at], ink[series.colour], 'right', 500, true);
}

function line(context: CanvasRenderingContext2D, x1: number, y1: number, x2: number, y2: number): void {
  context.beginPath();
  context.moveTo(x1, y1);
  context.lineTo(x2, y2);
  context.stroke();
}

/** The value that a place on the axis stands for in its own lane. */
function inLane(spec: PlotSpec, split: number): number {
  const { from, to } = spec.y;
  const lane = spec.y.lanes ? Math.max(0, Math.floor((to - split) / (to - from) - 1e-9)) : 0;
  return Number((split + laneOffset(spec, lane)).toPrecision(6));
}

/** A tick's figure, with a true minus sign. */
const plain = (value: number | null): string => (value === null ? '' : String(value).replace('-', '\u2212'));
