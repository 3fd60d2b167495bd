import type { Frame } from '#core/contract/frame.ts';
import type { Micros } from '#core/contract/time.ts';

/** The samples of one sensor during a passage on one even grid; NaN where there are none. */
export interface Wave {
  sensor: string;
  rateHz: number;
  startMicros: Micros;
  samples: Float32Array;
}

/** Two hours at 20 kHz: more than any window, small enough for a page. */
const LIMIT_SAMPLES = 144_000_000;

/** Joins the runs of each sensor onto one grid. A frame may hold several runs of a sensor, parted by gaps. */
export function wavesOf(frame: Frame): Map<string, Wave> {
  const waves = new Map<string, Wave>();
  for (const sensor of new Set(frame.header.channels.map((channel) => channel.sensor))) {
    const runs = frame.header.channels.filter((channel) => channel.sensor === sensor);
    const first = runs.reduce((earliest, run) => (run.startMicros < earliest.startMicros ? run : earliest));
    const at = (run: (typeof runs)[number]): number =>
      Math.round((run.startMicros - first.startMicros) / first.stepMicros);
    const count = Math.max(...runs.map((run) => at(run) + run.count));
    if (!(count > 0) || count > LIMIT_SAMPLES) continue;
    const samples = new Float32Array(count).fill(Number.NaN);
    for (const run of runs) samples.set(frame.data.subarray(run.at, run.at + run.count), at(run));
    waves.set(sensor, { sensor, rateHz: 1e6 / first.stepMicros, startMicros: first.startMicros, samples });
  }
  return waves;
}

/** Number of the sample nearest a time; may lie outside the wave. */
export function indexAt(wave: Wave, micros: Micros): number {
  return Math.round(((micros - wave.startMicros) * wave.rateHz) / 1e6);
}

/** Value nearest a time; null where there is no sample. */
export function valueAt(wave: Wave, micros: Micros): number | null {
  const value = wave.samples[indexAt(wave, micros)];
  return value === undefined || Number.isNaN(value) ? null : value;
}

/** Seconds of a sample after a time. */
export function secondsAfter(wave: Wave, index: number, micros: Micros): number {
  return (wave.startMicros - micros) / 1e6 + index / wave.rateHz;
}

/** Part of a wave as plain arrays for a plot: seconds after `zero`, and values with null where there are none. */
export function plotColumns(
  wave: Wave,
  zero: Micros,
  from: Micros,
  to: Micros,
): { seconds: number[]; values: (number | null)[] } {
  const seconds: number[] = [];
  const values: (number | null)[] = [];
  const last = Math.min(wave.samples.length - 1, indexAt(wave, to));
  for (let i = Math.max(0, indexAt(wave, from)); i <= last; i++) {
    const value = wave.samples[i]!;
    seconds.push(secondsAfter(wave, i, zero));
    values.push(Number.isNaN(value) ? null : value);
  }
  return { seconds, values };
}

/** Applies `filter` to each unbroken run of a wave; runs too short for it are left out. */
export function filterRuns(wave: Wave, shortest: number, filter: (run: Float64Array) => Float64Array): Wave {
  const samples = new Float32Array(wave.samples.length).fill(Number.NaN);
  let from = 0;
  while (from < samples.length) {
    while (from < samples.length && Number.isNaN(wave.samples[from]!)) from++;
    let to = from;
    while (to < samples.length && !Number.isNaN(wave.samples[to]!)) to++;
    if (to - from >= shortest) samples.set(filter(Float64Array.from(wave.samples.subarray(from, to))), from);
    from = to;
  }
  return { ...wave, samples };
}
