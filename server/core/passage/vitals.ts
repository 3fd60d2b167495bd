import type { Sensor } from '../contract/bridge.ts';
import type { ConditionCode, SensorCondition } from '../contract/health.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { unitConversion } from '../contract/units.ts';
import { quantile } from '../signal/robust.ts';
import { DYNAMIC_HZ } from './rule.ts';

/** Watches one channel for what a broken sensor does: stuck values, clipping, spikes, a noise floor or offset that moved. */
export interface Vitals {
  sensor: string;
  rateHz: number;
  /** Ends of the measuring range in SI; infinite where none is defined. */
  lowEnd: number;
  highEnd: number;
  noiseLimit: number;
  samples: number;
  last: number;
  beforeLast: number;
  /** Length of the present run of equal values, and of values at an end of the range. */
  equal: number;
  atEnd: number;
  /** Bends of the trace in the second in hand: the last two, the sum of squares, and the largest that a lone sample makes. */
  bend: number;
  beforeBend: number;
  bendSquares: number;
  lonely: number;
  lonelyMicros: Micros;
  /** The second in hand: number, count, sums about the first sample. */
  second: number;
  count: number;
  pivot: number;
  sum: number;
  squares: number;
  /** r.m.s. and mean of the seconds of the minute in hand. */
  rms: number[];
  means: number[];
  minute: number;
  noise: number | null;
  offset: number | null;
  /** Offset of the first full minute. */
  offsetAtStart: number | null;
  /** Conditions that hold, and when they were last seen. */
  active: { [code in ConditionCode]?: Micros | undefined };
}

const FLAT_SECONDS = 5;
const CLIP_SAMPLES = 3;
/** A lone sample bends the trace this many times more than the r.m.s. bend of its second, itself left out. */
const SPIKE_RATIO = 25;
/** A condition that comes and goes ends after this long without it. */
const HOLD_MICROS = 60 * MICROS_PER_SECOND;

export function createVitals(sensor: Sensor): Vitals {
  const { factor, shift } = unitConversion(sensor.unit, sensor.quantity) ?? { factor: 1, shift: 0 };
  const [low = -Infinity, high = Infinity] = sensor.range ?? [];
  return {
    sensor: sensor.id,
    rateHz: sensor.rateHz,
    lowEnd: Math.fround(low * factor + shift),
    highEnd: Math.fround(high * factor + shift),
    noiseLimit: sensor.noiseLimit ?? Infinity,
    samples: 0,
    last: NaN,
    beforeLast: NaN,
    equal: 0,
    atEnd: 0,
    bend: 0,
    beforeBend: 0,
    bendSquares: 0,
    lonely: 0,
    lonelyMicros: 0,
    second: -1,
    count: 0,
    pivot: 0,
    sum: 0,
    squares: 0,
    rms: [],
    means: [],
    minute: -1,
    noise: null,
    offset: null,
    offsetAtStart: null,
    active: {},
  };
}

/** Takes samples in order of time and tells of conditions that begin or end. */
export function watchVitals(
  vitals: Vitals,
  bridge: string,
  x: Float32Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  tell: (condition: SensorCondition) => void,
): void {
  const note = (code: ConditionCode, state: SensorCondition['state'], micros: Micros, detail: string): void =>
    tell({ bridge, sensor: vitals.sensor, code, state, micros, detail });
  const dynamic = vitals.rateHz >= DYNAMIC_HZ;
  let at = from;
  while (at < to) {
    const second = Math.floor(microsAt(at) / MICROS_PER_SECOND);
    if (second !== vitals.second) {
      closeSecond(vitals, second, note);
      vitals.second = second;
      vitals.pivot = x[at]!;
    }
    const left = ((second + 1) * MICROS_PER_SECOND - microsAt(at)) * (vitals.rateHz / MICROS_PER_SECOND);
    const end = Math.min(to, at + Math.max(1, Math.ceil(left - 1e-9)));
    if (dynamic) watchShape(vitals, x, at, end, microsAt, note);
    let { sum, squares } = vitals;
    for (let i = at; i < end; i++) {
      const d = x[i]! - vitals.pivot;
      sum += d;
      squares += d * d;
    }
    vitals.sum = sum;
    vitals.squares = squares;
    vitals.count += end - at;
    vitals.samples += end - at;
    at = end;
  }
}

type Note = (code: ConditionCode, state: SensorCondition['state'], micros: Micros, detail: string) => void;

function watchShape(
  vitals: Vitals,
  x: Float32Array,
  from: number,
  to: number,
  microsAt: (index: number) => Micros,
  note: Note,
): void {
  const flatRun = Math.ceil(FLAT_SECONDS * vitals.rateHz);
  const { lowEnd, highEnd } = vitals;
  let { last, beforeLast, equal, atEnd } = vitals;
  for (let i = from; i < to; i++) {
    const value = x[i]!;
    if (value === last) {
      equal += 1;
      if (equal === flatRun)
        begin(vitals, 'flat', microsAt(i), `the value has not moved from ${value} for ${FLAT_SECONDS} s`, note);
    } else {
      if (equal >= flatRun) end(vitals, 'flat', microsAt(i), 'the value moves again', note);
      equal = 0;
    }
    if (value <= lowEnd || value >= highEnd) {
      atEnd += 1;
      if (atEnd === CLIP_SAMPLES)
        begin(vitals, 'clipped', microsAt(i), `at the end of its range, ${value.toFixed(2)}`, note);
    } else {
      atEnd = 0;
    }
    if (vitals.samples + i - from >= 2) followBend(vitals, last - (beforeLast + value) / 2, i, microsAt);
    beforeLast = last;
    last = value;
  }
  vitals.last = last;
  vitals.beforeLast = beforeLast;
  vitals.equal = equal;
  vitals.atEnd = atEnd;
}

/** Bends of neighbours tell a lone sample: −1/2 of it on either side. */
function followBend(vitals: Vitals, after: number, i: number, microsAt: (index: number) => Micros): void {
  const { beforeBend, bend } = vitals;
  const half = -bend / 2;
  const alone = Math.abs(beforeBend - half) < Math.abs(half) / 2 && Math.abs(after - half) < Math.abs(half) / 2;
  if (alone && Math.abs(bend) > vitals.lonely) {
    vitals.lonely = Math.abs(bend);
    vitals.lonelyMicros = microsAt(i);
  }
  vitals.bendSquares += after * after;
  vitals.beforeBend = bend;
  vitals.bend = after;
}

function closeBends(vitals: Vitals, note: Note): void {
  // A lone sample of height S leaves S² + 2 (S/2)² in the sum, a few percent more or less by the noise it rides on.
  const square = vitals.lonely * vitals.lonely;
  const others = Math.max(0, vitals.bendSquares - 1.5 * square) + 0.02 * square;
  const rms = Math.sqrt(others / Math.max(1, vitals.count - 3));
  if (vitals.count > 20 && vitals.lonely > SPIKE_RATIO * rms) {
    begin(vitals, 'spike', vitals.lonelyMicros, `a single sample stands out by ${vitals.lonely.toPrecision(3)}`, note);
  }
  vitals.bendSquares = 0;
  vitals.lonely = 0;
}

function closeSecond(vitals: Vitals, next: number, note: Note): void {
  if (vitals.count > 0) {
    const mean = vitals.sum / vitals.count;
    vitals.rms.push(Math.sqrt(Math.max(0, vitals.squares / vitals.count - mean * mean)));
    vitals.means.push(mean + vitals.pivot);
  }
  closeBends(vitals, note);
  vitals.count = 0;
  vitals.sum = 0;
  vitals.squares = 0;
  const minute = Math.floor(next / 60);
  if (minute === vitals.minute) return;
  if (vitals.minute >= 0 && vitals.rms.length >= 30) closeMinute(vitals, next * MICROS_PER_SECOND, note);
  for (const code of ['clipped', 'spike'] as const) {
    const since = vitals.active[code];
    if (since !== undefined && next * MICROS_PER_SECOND - since > HOLD_MICROS) {
      end(vitals, code, next * MICROS_PER_SECOND, 'not seen for a minute', note);
    }
  }
  vitals.minute = minute;
  vitals.rms = [];
  vitals.means = [];
}

/** Trains shake a few seconds of a minute: the lower quartile of its seconds is the quiet noise, their median the offset. */
function closeMinute(vitals: Vitals, micros: Micros, note: Note): void {
  const noise = quantile(vitals.rms, 0.25);
  const offset = quantile(vitals.means, 0.5);
  vitals.noise = noise;
  vitals.offset = offset;
  vitals.offsetAtStart ??= offset;
  const loud = noise > vitals.noiseLimit;
  if (loud)
    begin(vitals, 'noise high', micros, `quiet noise ${noise.toPrecision(3)}, limit ${vitals.noiseLimit}`, note);
  else end(vitals, 'noise high', micros, `quiet noise ${noise.toPrecision(3)} again`, note);
  const width = vitals.highEnd - vitals.lowEnd;
  if (!Number.isFinite(width) || vitals.rateHz < 10) return;
  const moved = offset - vitals.offsetAtStart;
  if (Math.abs(moved) > 0.02 * width)
    begin(vitals, 'offset drift', micros, `offset moved by ${moved.toPrecision(3)}`, note);
  else end(vitals, 'offset drift', micros, 'offset is back', note);
}

function begin(vitals: Vitals, code: ConditionCode, micros: Micros, detail: string, note: Note): void {
  if (vitals.active[code] === undefined) note(code, 'began', micros, detail);
  vitals.active[code] = micros;
}

function end(vitals: Vitals, code: ConditionCode, micros: Micros, detail: string, note: Note): void {
  if (vitals.active[code] === undefined) return;
  note(code, 'ended', micros, detail);
  vitals.active[code] = undefined;
}
