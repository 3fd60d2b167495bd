import { spanAt, type BridgeDefinition, type Limit } from '../contract/bridge.ts';
import { measured, notMeasurable, type Measured } from '../contract/measure.ts';
import type { ChannelMeasures } from '../contract/passage.ts';
import { SEVERITIES, severityOf, severityRank, type Severity } from '../contract/severity.ts';
import type { Micros } from '../contract/time.ts';
import { createRealTransform } from '../signal/fourier.ts';
import { excursions, slidingMeanSquareMax } from '../signal/sliding.ts';
import { truePeak } from '../signal/true-peak.ts';
import { hann } from '../signal/window.ts';
import { zeroPhase, zeroPhaseLowpass } from '../signal/zero-phase.ts';
import { bandOfLimit } from './band.ts';
import { microsOf, rangeOf, type RecordChannel } from './record.ts';
import { RULE } from './rule.ts';

/** What one deck channel says against one limit. */
export interface LimitReading {
  limit: string;
  value: number;
  micros: Micros;
  severity: Severity | null;
  /** Value over the gravest level that is set. */
  ofGravest: number;
}

export interface ChannelReading {
  measures: ChannelMeasures;
  readings: LimitReading[];
}

/** Measures of one channel between the first axle and the end of the window. */
export function measureChannel(
  bridge: BridgeDefinition,
  channel: RecordChannel,
  fromMicros: Micros,
  toMicros: Micros,
): ChannelReading {
  const span = spanAt(bridge, channel.sensor.alongM);
  const limits = channel.deck ? bridge.limits.filter((limit) => limit.spans?.includes(span.id) ?? true) : [];
  const [from, to] = rangeOf(channel, fromMicros, toMicros);
  const quiet = noiseAndOffset(channel);
  const shape = { sensor: channel.sensor.id, rateHz: channel.rateHz, ...quiet, flags: channel.flags };
  if (to - from < 8) {
    const none = notMeasurable('no samples between the first axle and the end of the window');
    return {
      measures: {
        ...shape,
        rawPeak: none,
        bandPeak: none,
        bandPeakMicros: null,
        rms: none,
        timeAboveS: {},
        cyclesAbove: {},
        dominantHz: none,
      },
      readings: [],
    };
  }
  const raw = truePeak(channel.x, from, to);
  if (!channel.deck) {
    const none = notMeasurable('the band rule is for deck acceleration');
    return {
      measures: {
        ...shape,
        rawPeak: value(channel, Math.abs(raw.value)),
        bandPeak: none,
        bandPeakMicros: null,
        rms: none,
        timeAboveS: {},
        cyclesAbove: {},
        dominantHz: none,
      },
      readings: [],
    };
  }
  const bands = bandSignals(bridge, channel, limits, from, to);
  const first = bands[0]!;
  const inBand = first.signal.subarray(from, to);
  const rms = Math.sqrt(slidingMeanSquareMax(inBand, Math.max(1, Math.round(channel.rateHz))));
  const above = timesAbove(inBand, limits[0], channel.rateHz);
  return {
    measures: {
      ...shape,
      rawPeak: value(channel, Math.abs(raw.value)),
      bandPeak: value(channel, first.peak, first.note),
      bandPeakMicros: microsOf(channel, first.index),
      rms: value(channel, rms),
      ...above,
      dominantHz: dominantFrequency(first.signal, Math.round(first.index), channel.rateHz),
    },
    readings: bands.flatMap(({ limits: rules, peak, index }) =>
      rules.map((limit) => ({
        limit: limit.id,
        value: peak,
        micros: microsOf(channel, index),
        severity: severityOf(peak, limit.levels),
        ofGravest: peak / Math.max(...Object.values(limit.levels)),
      })),
    ),
  };
}

/** Gravest first; at equal severity the one nearest to its limit. */
export function worseReading(a: LimitReading, b: LimitReading): number {
  return severityRank(b.severity) - severityRank(a.severity) || b.ofGravest - a.ofGravest;
}

interface BandSignal {
  limits: Limit[];
  signal: Float64Array;
  peak: number;
  index: number;
  note: string | undefined;
}

/** The zero-phase band signal and its peak for each band edge that a limit asks for; the code's band where there is no limit. */
function bandSignals(
  bridge: BridgeDefinition,
  channel: RecordChannel,
  limits: readonly Limit[],
  from: number,
  to: number,
): BandSignal[] {
  const byEdge = new Map<number, Limit[]>();
  for (const limit of limits) {
    const { upToHz } = bandOfLimit(bridge, limit.band, channel.sensor);
    byEdge.set(upToHz, [...(byEdge.get(upToHz) ?? []), limit]);
  }
  if (byEdge.size === 0) byEdge.set(bandOfLimit(bridge, 'EN 1990 A2', channel.sensor).upToHz, []);
  return [...byEdge].map(([upToHz, rules]) => {
    const wide = upToHz > BAND_OF_RATE * channel.rateHz;
    const signal = wide ? channel.x : zeroPhase(zeroPhaseLowpass(RULE.bandOrder, upToHz, channel.rateHz), channel.x);
    const { value: peak, index } = truePeak(signal, from, to);
    const note = wide
      ? `the rate of ${channel.rateHz} Hz is too low to filter at ${upToHz} Hz; nothing was filtered`
      : undefined;
    return { limits: rules, signal, peak: Math.abs(peak), index, note };
  });
}

/** Above this share of the rate the band edge is out of reach of a digital filter worth the name. */
const BAND_OF_RATE = 0.45;

function noiseAndOffset(channel: RecordChannel): { offset: Measured; noise: Measured } {
  const { offset, offsetError, noise } = channel;
  if (offset === null || noise === null) {
    const none = notMeasurable('no quiet part before the train');
    return { offset: none, noise: none };
  }
  return { offset: measured(offset, offsetError), noise: measured(noise, null) };
}

/** A peak is uncertain by the noise that rides on it. */
function value(channel: RecordChannel, magnitude: number, note?: string): Measured {
  const reason = channel.flags.length > 0 ? `sensor: ${channel.flags.join(', ')}` : note;
  return measured(
    magnitude,
    channel.noise,
    channel.flags.length > 0 ? 'poor' : note === undefined ? 'good' : 'usable',
    reason,
  );
}

function timesAbove(
  x: Float64Array,
  limit: Limit | undefined,
  rateHz: number,
): Pick<ChannelMeasures, 'timeAboveS' | 'cyclesAbove'> {
  const timeAboveS: Record<string, number> = {};
  const cyclesAbove: Record<string, number> = {};
  for (const severity of SEVERITIES) {
    const level = limit?.levels[severity];
    if (level === undefined) continue;
    const { secondsAbove, count } = excursions(x, level, rateHz);
    timeAboveS[severity] = secondsAbove;
    cyclesAbove[severity] = count;
  }
  return { timeAboveS, cyclesAbove };
}

/** Strongest line of a Hann-windowed stretch of about 2 s around the peak, placed by a parabola through its logarithm. */
function dominantFrequency(x: Float64Array, at: number, rateHz: number): Measured {
  const size = 2 ** Math.ceil(Math.log2(2 * rateHz));
  const segment = new Float64Array(size);
  const window = hann(size, 'periodic');
  for (let i = 0; i < size; i++) segment[i] = (x[at - size / 2 + i] ?? 0) * window[i]!;
  const re = new Float64Array(size / 2 + 1);
  const im = new Float64Array(size / 2 + 1);
  createRealTransform(size).forward(segment, re, im);
  const power = re.map((r, k) => r * r + im[k]! * im[k]!);
  let top = 2;
  for (let k = 2; k < size / 2; k++) if (power[k]! > power[top]!) top = k;
  if (!(power[top]! > 0)) return notMeasurable('the signal is zero around its peak');
  const [a, b, c] = [power[top - 1]!, power[top]!, power[top + 1]!].map((p) => Math.log(p + 1e-300)) as [
    number,
    number,
    number,
  ];
  const bend = a - 2 * b + c;
  const shift = bend < 0 ? (0.5 * (a - c)) / bend : 0;
  return measured(((top + shift) * rateHz) / size, rateHz / size / 4);
}
