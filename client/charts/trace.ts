/**
 * Paths of long traces. Where several samples fall on one pixel, the pixel gets their least and greatest
 * value, so that no peak is lost; where there is no sample (NaN), the path is broken.
 */

interface Run {
  /** Pixel along the time axis, and the pixels of the least and greatest value there. */
  at: number;
  low: number;
  high: number;
  first: number;
  last: number;
}

/**
 * @param samples values, NaN where there are none
 * @param from first sample drawn
 * @param to sample after the last one drawn
 * @param along sample number → pixel along time
 * @param across value → pixel across time
 * @param step pixels that one pair of values stands for
 */
function* runs(
  samples: Float32Array,
  from: number,
  to: number,
  along: (index: number) => number,
  step: number,
): Generator<Run | null> {
  let run: Run | null = null;
  for (let i = Math.max(0, from); i < Math.min(samples.length, to); i++) {
    const value = samples[i]!;
    if (Number.isNaN(value)) {
      if (run) yield run;
      if (run) yield null;
      run = null;
      continue;
    }
    const at = along(i);
    if (run && at - run.at < step) {
      if (value < run.low) run.low = value;
      if (value > run.high) run.high = value;
      run.last = value;
    } else {
      if (run) yield run;
      run = { at, low: value, high: value, first: value, last: value };
    }
  }
  if (run) yield run;
}

const tenth = (value: number): number => Math.round(value * 10) / 10;

/** Path with time along x. */
export function tracePath(
  samples: Float32Array,
  from: number,
  to: number,
  x: (index: number) => number,
  y: (value: number) => number,
  step = 0.5,
): string {
  return path(samples, from, to, x, step, (at, value) => `${tenth(at)} ${tenth(y(value))}`);
}

/** Path with time running down the page. */
export function hangingPath(
  samples: Float32Array,
  from: number,
  to: number,
  y: (index: number) => number,
  x: (value: number) => number,
  step = 0.5,
): string {
  return path(samples, from, to, y, step, (at, value) => `${tenth(x(value))} ${tenth(at)}`);
}

function path(
  samples: Float32Array,
  from: number,
  to: number,
  along: (index: number) => number,
  step: number,
  point: (at: number, value: number) => string,
): string {
  let data = '';
  let pen = 'M';
  for (const run of runs(samples, from, to, along, step)) {
    if (!run) {
      pen = 'M';
      continue;
    }
    const falling = run.first > run.last;
    const [one, two] = falling ? [run.high, run.low] : [run.low, run.high];
    data += `${pen}${point(run.at, one)}`;
    if (two !== one) data += `L${point(run.at, two)}`;
    pen = 'L';
  }
  return data;
}

/** Closed area between a hanging trace's positive half and its zero line. */
export function hangingFill(
  samples: Float32Array,
  from: number,
  to: number,
  y: (index: number) => number,
  x: (value: number) => number,
  step = 0.5,
): string {
  const zero = tenth(x(0));
  let data = '';
  let open = false;
  let last = 0;
  const close = (): void => {
    if (open) data += `L${zero} ${tenth(last)}Z`;
    open = false;
  };
  for (const run of runs(samples, from, to, y, step)) {
    if (!run) {
      close();
      continue;
    }
    const at = tenth(run.at);
    if (!open) data += `M${zero} ${at}`;
    data += `L${run.high > 0 ? tenth(x(run.high)) : zero} ${at}`;
    open = true;
    last = run.at;
  }
  close();
  return data;
}

/** The samples whose magnitude is above a limit; NaN elsewhere, so that a path of them is drawn in pieces. */
export function onlyAbove(samples: Float32Array, limit: number): Float32Array {
  return samples.map((value) => (Math.abs(value) > limit ? value : Number.NaN));
}
