import uPlot from 'uplot';
import type { Micros } from '#core/contract/time.ts';
import type { EnvelopeStore } from './envelope-store.ts';
import { onThemeChange, readInk, type Ink } from './ink.ts';
import type { Lane } from './strip-layout.ts';
import { drawBehind, drawOver, type LanePeak, type StripFrame } from './strip-ink.ts';

/**
 * Strips of all chosen channels as one plot: each lane has its own scale, stretched so that it fills its part of the
 * height. One canvas, one redraw a frame, none while the page is hidden.
 */
export interface StripSource {
  store: EnvelopeStore;
  /** The moment at the right edge. */
  now: () => Micros;
  /** Whether time runs. */
  running: () => boolean;
  windowS: () => number;
  lanes: () => readonly Lane[];
  /** From when the peaks count, and how many axles have been counted; asked once a redraw. */
  peaksFrom: () => Micros | null;
  /** Null where they were not all seen. */
  axleCount: () => number | null;
  zone: () => string;
}

export interface Strips {
  /** Samples came, or the reader chose otherwise. */
  wake(): void;
  /** The lanes are others now. */
  rebuild(height: number): void;
  /** Moves the cursor by pixels; null takes it away. */
  step(pixels: number | null): void;
  readonly canvas: HTMLCanvasElement;
  destroy(): void;
}

export interface StripReport {
  cursor(reading: { micros: Micros; values: (readonly [low: number, high: number] | null)[] } | null): void;
  /** @param fromMicros from when they are the largest; null for the window shown */
  peaks(peaks: readonly LanePeak[], fromMicros: Micros | null): void;
}

const AXIS = 24;
/** Peaks are told to the page this often at the most. */
const TELL_MS = 500;

export const margins = (width: number): { left: number; right: number } =>
  width < 560 ? { left: 62, right: 78 } : { left: 98, right: 146 };

export function mountStrips(host: HTMLElement, firstHeight: number, source: StripSource, report: StripReport): Strips {
  let ink = readInk(host);
  let height = firstHeight;
  let frame: StripFrame = emptyFrame(source, ink);
  let buffers = buffersFor(source);
  let handle = 0;
  let toldMs = 0;
  let dirty = true;
  const calm = matchMedia('(prefers-reduced-motion: reduce)');
  let plot = build();

  function build(): uPlot {
    const { left, right } = margins(host.clientWidth);
    const options: uPlot.Options = {
      width: host.clientWidth || 600,
      height: height + AXIS,
      legend: { show: false },
      padding: [0, right, 0, left],
      scales: {
        x: { time: false, range: (_u, min, max) => [min, max] },
        ...Object.fromEntries(
          source.lanes().map((_, i) => [`y${i}`, { range: () => stretched(frame, source.lanes()[i], i, height) }]),
        ),
      },
      axes: [
        {
          size: AXIS,
          stroke: () => ink.ink3,
          grid: { show: false },
          ticks: { show: false },
          splits: () => [],
          values: () => [],
        },
      ],
      series: [
        {},
        ...source.lanes().map(({ sensor }, i) => ({
          label: sensor.id,
          scale: `y${i}`,
          stroke: () => ink.ink,
          width: 0.95,
          spanGaps: false,
          points: { show: false },
        })),
      ],
      cursor: { y: false, points: { show: false }, drag: { x: false, y: false, setScale: false } },
      hooks: {
        drawClear: [(u) => drawBehind(u, frame)],
        draw: [(u) => drawOver(u, frame)],
        setCursor: [(u) => report.cursor(readingAt(u))],
      },
    };
    return new uPlot(options, buffers.data as unknown as uPlot.AlignedData, host);
  }

  function readingAt(u: uPlot): Parameters<StripReport['cursor']>[0] {
    const left = u.cursor.left ?? -1;
    if (left < 0) return null;
    const column = Math.floor(u.posToVal(left, 'x') / (source.store.columnMicros / 1e6));
    return {
      micros: (frame.firstColumn + column) * source.store.columnMicros,
      values: source.lanes().map(({ sensor }) => {
        const found = source.store.extremes(sensor.id, frame.firstColumn + column, 1);
        return found && ([found.low, found.high] as const);
      }),
    };
  }

  function redraw(): void {
    handle = 0;
    if (document.hidden) return;
    const { store } = source;
    const edge = source.now();
    const windowMicros = source.windowS() * 1e6;
    const first = store.columnAt(edge - windowMicros);
    const count = Math.min(buffers.columns, store.columnAt(edge) - first + 1);
    fill(buffers, source, first, count);
    frame = {
      ...frame,
      ink,
      ratio: devicePixelRatio,
      firstColumn: first,
      columnMicros: store.columnMicros,
      edge,
      windowMicros,
      newestMicros: store.newestMicros,
      lanes: source.lanes(),
      traces: buffers.data.slice(1),
      count,
      axles: source.axleCount(),
      zone: source.zone(),
      ...peaksOf(source, first, count),
    };
    frame.ranges = rangesOf(frame);
    const origin = first * store.columnMicros;
    plot.batch(() => {
      plot.setData(buffers.data as unknown as uPlot.AlignedData, false);
      plot.setScale('x', { min: (edge - windowMicros - origin) / 1e6, max: (edge - origin) / 1e6 });
    });
    const nowMs = performance.now();
    if (nowMs - toldMs > TELL_MS) {
      toldMs = nowMs;
      report.peaks(frame.peaks, frame.peaksFromMicros);
    }
    dirty = false;
    if (source.running() && store.newestMicros > 0 && !calm.matches) next();
  }

  /** While time runs, at each second frame of the screen: half of the work for a motion that looks the same. */
  let odd = false;
  function next(): void {
    if (handle !== 0) return;
    handle = requestAnimationFrame(() => {
      odd = !odd;
      // While time runs, new samples wait for the next frame with all the rest.
      if (odd && (source.running() || !dirty)) {
        handle = 0;
        next();
      } else redraw();
    });
  }

  const wake = (): void => {
    dirty = true;
    next();
  };

  const size = new ResizeObserver(() => {
    if (host.clientWidth === 0 || host.clientWidth === plot.width) return;
    rebuild(height);
  });
  size.observe(host);
  const endTheme = onThemeChange(() => {
    ink = readInk(host);
    wake();
  });
  const shown = (): void => {
    if (!document.hidden) wake();
  };
  document.addEventListener('visibilitychange', shown);

  function rebuild(nextHeight: number): void {
    height = nextHeight;
    plot.destroy();
    buffers = buffersFor(source);
    frame = emptyFrame(source, ink);
    plot = build();
    wake();
  }

  wake();
  return {
    wake,
    rebuild,
    step(pixels) {
      if (pixels === null) {
        plot.setCursor({ left: -10, top: -10 });
        return;
      }
      const left = plot.cursor.left ?? -1;
      const width = plot.over.clientWidth;
      plot.setCursor({ left: left < 0 ? width : Math.max(0, Math.min(width, left + pixels)), top: 10 });
    },
    get canvas() {
      return plot.ctx.canvas;
    },
    destroy() {
      cancelAnimationFrame(handle);
      size.disconnect();
      endTheme();
      document.removeEventListener('visibilitychange', shown);
      plot.destroy();
    },
  };
}

interface Buffers {
  columns: number;
  /** Times, then two points a column for each lane; reused at each redraw. */
  data: (number | null)[][];
}

function buffersFor(source: StripSource): Buffers {
  const columns = Math.ceil((source.windowS() * 1e6) / source.store.columnMicros) + 2;
  const step = source.store.columnMicros / 1e6;
  const times = Array.from({ length: 2 * columns }, (_, i) => (Math.floor(i / 2) + (i % 2 === 0 ? 0.25 : 0.75)) * step);
  const lanes = source.lanes().map(() => new Array<number | null>(2 * columns).fill(null));
  return { columns, data: [times, ...lanes] };
}

function fill(buffers: Buffers, source: StripSource, first: number, count: number): void {
  source.lanes().forEach(({ sensor }, i) => {
    const trace = buffers.data[i + 1];
    if (!trace) return;
    source.store.trace(sensor.id, first, count, trace);
    trace.fill(null, 2 * count);
  });
}

function peaksOf(
  { store, peaksFrom, lanes }: StripSource,
  first: number,
  count: number,
): Pick<StripFrame, 'peaks' | 'peaksFromMicros'> {
  const wanted = peaksFrom();
  const from = wanted === null ? first : Math.max(store.columnAt(wanted), first + count - store.capacity);
  const peaks = lanes().map(({ sensor }) => {
    const found = store.extremes(sensor.id, from, first + count - from);
    return {
      sensor: sensor.id,
      peak: found && Math.max(Math.abs(found.low), Math.abs(found.high)),
      low: found?.low ?? 0,
      high: found?.high ?? 0,
    };
  });
  return { peaks, peaksFromMicros: wanted === null ? null : Math.max(wanted, from * store.columnMicros) };
}

function emptyFrame(source: StripSource, ink: Ink): StripFrame {
  const { columnMicros } = source.store;
  return {
    ink,
    ratio: devicePixelRatio,
    lanes: source.lanes(),
    ranges: source.lanes().map(() => ({ low: -1, high: 1 })),
    traces: [],
    peaks: [],
    peaksFromMicros: null,
    firstColumn: 0,
    columnMicros,
    count: 0,
    edge: 0,
    windowMicros: source.windowS() * 1e6,
    newestMicros: 0,
    axles: 0,
    zone: source.zone(),
    still: { key: '', canvas: null },
  };
}

/** Ranges only grow while the lanes stay, so that a picture does not breathe. */
function rangesOf(frame: StripFrame): StripFrame['ranges'] {
  const shared = frame.lanes
    .flatMap((lane, i) =>
      lane.kind === 'acceleration' ? [(lane.limits[0]?.value ?? 0.4) * 1.15, (frame.peaks[i]?.peak ?? 0) * 1.1] : [],
    )
    .reduce((a, b) => Math.max(a, b), 0.4);
  return frame.lanes.map((lane, i) => {
    const before = frame.ranges[i] ?? { low: -1, high: 1 };
    const peak = frame.peaks[i];
    // One scale for all accelerations, so that they can be compared by eye.
    if (lane.kind === 'acceleration') return { low: -shared, high: shared };
    const high = Math.max(lane.unit === '' ? 1 : 10, before.high, roundUp((peak?.high ?? 0) * 1.12));
    return { low: Math.min(before.low, -0.2 * high, (peak?.low ?? 0) * 1.1), high };
  });
}

function roundUp(value: number): number {
  if (value <= 0) return 0;
  const power = 10 ** Math.floor(Math.log10(value));
  return Math.ceil((value / power) * 2) * (power / 2);
}

/** A lane's range stretched to the whole height, so that the range itself falls on its lane. */
function stretched(frame: StripFrame, lane: Lane | undefined, index: number, height: number): [number, number] {
  if (!lane) return [0, 1];
  const { low, high } = frame.ranges[index] ?? { low: -1, high: 1 };
  const perPx = (high - low) / lane.height;
  return [low - (height - lane.top - lane.height) * perPx, high + lane.top * perPx];
}
