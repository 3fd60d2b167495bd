import uPlot from 'uplot';
import type { Micros } from '#core/contract/time.ts';
import { onThemeChange, readInk, type Ink } from './ink.ts';
import { DASHES } from './limit-line.ts';
import { ticks } from './scale.ts';

/** One minute of a channel: power spectral density, (m/s²)²/Hz. */
export interface SpectrumRow {
  micros: Micros;
  psd: readonly number[];
}

export interface RollSpec {
  stepHz: number;
  /** Oldest first, at most ROWS. */
  rows: readonly SpectrumRow[];
  toHz: number;
  marks: readonly { hz: number; label: string }[];
}

export interface Roll {
  update(spec: RollSpec): void;
  readonly canvas: HTMLCanvasElement;
  destroy(): void;
}

/** Lines that are shown: a quarter of an hour. */
export const ROWS = 13;
/** Height of the whole, from one line to the next behind it, and of a power of ten of amplitude, px. */
const HEIGHT = 158;
const FOOT = 24;
const TOP = 22;
const STEP_PX = 4.6;
const DECADE_PX = 15;
const LEFT = 48;
const RIGHT = 26;

/** Lines of the last minutes behind each other, the newest in front and tinted; amplitude on a logarithmic scale. */
export function mountRoll(host: HTMLElement, first: RollSpec): Roll {
  let spec = first;
  let ink = readInk(host);
  let plot = build();

  function build(): uPlot {
    const plotHeight = HEIGHT - FOOT - TOP;
    const options: uPlot.Options = {
      width: host.clientWidth || 435,
      height: HEIGHT,
      padding: [TOP, RIGHT, 0, LEFT],
      legend: { show: false },
      scales: {
        x: { time: false, range: () => [0, spec.toHz] },
        // A unit is a pixel.
        y: { range: () => [0, plotHeight] },
      },
      axes: [
        {
          size: FOOT,
          font: `12px ${ink.narrow}`,
          stroke: () => ink.ink3,
          grid: { stroke: () => ink.grid, width: 0.7 },
          ticks: { stroke: () => ink.edge, width: 0.95, size: 4 },
          gap: 3,
          border: { show: true, stroke: () => ink.edge, width: 0.95 },
          splits: (u) => ticks(0, spec.toHz, u.width / 78),
          values: (_u, splits) => splits.map((hz) => (hz === splits.at(-1) ? `${hz} Hz` : String(hz))),
        },
        { show: false },
      ],
      series: [
        {},
        ...spec.rows.map((_, i) => {
          const newest = i === spec.rows.length - 1;
          const base = (spec.rows.length - 1 - i) * STEP_PX;
          return {
            stroke: () => (newest ? ink.ink : ink.ink2),
            fill: () => (newest ? ink.tint : ink.paper),
            fillTo: base - 3,
            width: newest ? 1.9 : 0.7,
            points: { show: false },
          };
        }),
      ],
      cursor: { show: false },
      hooks: { draw: [(u) => drawMarks(u, spec, ink)] },
    };
    return new uPlot(options, dataOf(spec), host);
  }

  const size = new ResizeObserver(() => {
    if (host.clientWidth > 0 && host.clientWidth !== plot.width)
      plot.setSize({ width: host.clientWidth, height: HEIGHT });
  });
  size.observe(host);
  const endTheme = onThemeChange(() => {
    ink = readInk(host);
    plot.redraw(false);
  });
  return {
    update(next) {
      spec = next;
      plot.destroy();
      plot = build();
    },
    get canvas() {
      return plot.ctx.canvas;
    },
    destroy() {
      size.disconnect();
      endTheme();
      plot.destroy();
    },
  };
}

/** Logarithm of the amplitude over the quietest that is shown, in pixels above each line's own base. */
function dataOf({ rows, stepHz, toHz }: RollSpec): uPlot.AlignedData {
  const count = Math.min(Math.floor(toHz / stepHz) + 1, rows[0]?.psd.length ?? 0);
  const x = Array.from({ length: count }, (_, k) => k * stepHz);
  const floor = quietest(rows, count);
  const lines = rows.map(({ psd }, i) => {
    const base = (rows.length - 1 - i) * STEP_PX;
    return x.map((_, k) => {
      const power = psd[k];
      // The offset of the first lines, below one cycle in two seconds, says nothing of the bridge.
      if (power === undefined || !(power > 0) || k * stepHz < 0.4) return null;
      return base + Math.max(0, (Math.log10(power / floor) / 2) * DECADE_PX);
    });
  });
  return [x, ...lines] as uPlot.AlignedData;
}

/** A tenth of the points of all lines lie below it. */
function quietest(rows: readonly SpectrumRow[], count: number): number {
  const powers = rows.flatMap(({ psd }) => psd.slice(1, count).filter((power) => power > 0)).sort((a, b) => a - b);
  return powers[Math.floor(powers.length * 0.1)] ?? 1e-9;
}

function drawMarks(u: uPlot, { marks, rows, toHz }: RollSpec, ink: Ink): void {
  const { ctx: context } = u;
  const ratio = devicePixelRatio;
  context.save();
  context.scale(ratio, ratio);
  const left = u.bbox.left / ratio;
  const right = left + u.bbox.width / ratio;
  const top = u.bbox.top / ratio;
  const foot = top + u.bbox.height / ratio;
  context.textBaseline = 'alphabetic';
  const write = (text: string, x: number, y: number, colour: string, align: CanvasTextAlign, weight = 400): void => {
    context.font = `${weight} 12px ${ink.narrow}`;
    context.fillStyle = colour;
    context.textAlign = align;
    context.fillText(text, x, y);
  };
  let free = -Infinity;
  for (const { hz, label } of marks) {
    if (hz > toHz) continue;
    const x = Math.round(left + (hz / toHz) * (right - left)) + 0.5;
    context.strokeStyle = ink.ink;
    context.lineWidth = 0.7;
    context.setLineDash([...DASHES.chain]);
    context.beginPath();
    context.moveTo(x, 4);
    context.lineTo(x, foot);
    context.stroke();
    const wide = context.measureText(label).width + 12;
    const flip = x + wide > right + RIGHT;
    if (x - (flip ? wide : 0) > free) {
      write(label, flip ? x - 5 : x + 5, 14, ink.ink, flip ? 'right' : 'left');
      free = flip ? x : x + wide;
    }
  }
  context.setLineDash([]);
  write('now', 0, foot, ink.ink, 'left', 500);
  const back = rows.length - 1;
  if (back > 4) {
    const y = foot - back * STEP_PX;
    const minutes = Math.round((rows[back]!.micros - rows[0]!.micros) / 60e6);
    write(`${minutes} min`, 0, Math.min(y, foot - 26), ink.ink3, 'left');
    write('ago', 0, Math.min(y + 13, foot - 13), ink.ink3, 'left');
  }
  // A power of ten of amplitude, as a bar: the lines have no axis of their own.
  context.strokeStyle = ink.ink;
  context.lineWidth = 0.95;
  context.beginPath();
  context.moveTo(right + 11.5, foot - DECADE_PX);
  context.lineTo(right + 11.5, foot);
  context.moveTo(right + 8, foot - DECADE_PX);
  context.lineTo(right + 15, foot - DECADE_PX);
  context.moveTo(right + 8, foot);
  context.lineTo(right + 15, foot);
  context.stroke();
  write('× 10', right + RIGHT, foot - DECADE_PX - 5, ink.ink3, 'right');
  context.restore();
}
