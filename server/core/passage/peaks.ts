import { spanAt, type BridgeDefinition, type Limit } from '../contract/bridge.ts';
import { LOWER_BOUND, measured, notMeasurable, type Measured } from '../contract/measure.ts';
import type { ChannelMeasures, LimitMeasures } from '../contract/passage.ts';
import { SEVERITIES, severityOf } from '../contract/severity.ts';
import type { Micros } from '../contract/time.ts';
import { createRealTransform } from '../signal/fourier.ts';
import { denser } from '../signal/interpolation.ts';
import { excursions, slidingMeanSquareMax } from '../signal/sliding.ts';
import { truePeak, type TruePeak } from '../signal/true-peak.ts';
import { hann } from '../signal/window.ts';
import { zeroPhase, zeroPhaseLowpass } from '../signal/zero-phase.ts';
import { bandOfLimit, canFilter } from './band.ts';
import { microsOf, rangeOf, solidParts, type RecordChannel } from './record.ts';
import { RULE } from './rule.ts';

/** Why every peak of a passage is but a lower bound; null where the whole train was recorded. */
export type CutShort = string | null;

/** What is said of a channel where something is missing. */
export interface EventWords {
  noQuiet: string;
  noSamples: string;
  gaps: string;
}

/** Of a train's passage. */
const OF_A_TRAIN: EventWords = {
  noQuiet: 'no quiet part before the train',
  noSamples: 'no samples between the first axle and the end of the window',
  gaps: 'samples are missing while the train was there',
};

/** Of what is not known to be a train; of a recording that is taken as one event, where no quiet part is looked for. */
export function eventWords(train: boolean, whole: boolean): EventWords {
  const words: EventWords = train
    ? OF_A_TRAIN
    : {
        noQuiet: 'no quiet part before the event',
        noSamples: 'no samples of the event',
        gaps: 'samples are missing during the event',
      };
  return whole ? { ...words, noQuiet: 'the whole recording is one event: none of it is taken for quiet' } : words;
}

/**
 * Measures of one channel between the first axle and the end of the window. Gaps, and what a filter smears of them, are
 * kept out of the search for peaks.
 *
 * @param channel a channel of the arranged record; strain and the like have a raw peak only
 * @param fromMicros shortly before the first axle
 * @param toMicros end of the window
 * @param cut said of every peak, which is then poor
 * @param words said where something is missing
 */
export function measureChannel(
  bridge: BridgeDefinition,
  channel: RecordChannel,
  fromMicros: Micros,
  toMicros: Micros,
  cut: CutShort = null,
  words: EventWords = OF_A_TRAIN,
): ChannelMeasures {
  const [from, to] = rangeOf(channel, fromMicros, toMicros);
  const raw = largestOf(channel, channel.x, from, to, RAW_MARGIN);
  const doubt = doubtOf(channel, cut, words);
  const noSamples = notMeasurable(words.noSamples);
  const measures = {
    sensor: channel.sensor.id,
    rateHz: channel.rateHz,
    ...noiseAndOffset(channel, words),
    flags: channel.flags,
    rawPeak: raw === null ? noSamples : peakValue(raw.value, channel.noise, doubt),
  };
  if (raw === null || !channel.deck) return { ...measures, ...notInBand(channel.deck ? noSamples : NOT_DECK) };
  const bands = bandSignals(bridge, channel, from, to);
  const first = bands[0];
  if (first === undefined) return { ...measures, ...notInBand(noSamples) };
  const inBand = first.signal.subarray(from, to);
  const rms = Math.sqrt(slidingMeanSquareMax(inBand, Math.max(1, Math.round(channel.rateHz))));
  // Noise of a band B wide, over T seconds, moves an r.m.s. by σ/√(2BT) (Bendat and Piersol, Random Data, 8.2).
  const rmsNoise = first.noise === null ? null : first.noise / Math.sqrt(2 * first.upToHz);
  return {
    ...measures,
    bandPeak: bandValue(first, doubt),
    bandPeakMicros: microsOf(channel, first.index),
    rms: peakValue(rms, rmsNoise, doubt, first.note),
    limits: bands.flatMap((band) => band.limits.map((limit) => againstLimit(channel, band, limit, [from, to], doubt))),
    dominantHz: dominantFrequency(first.signal, Math.round(first.index), channel.rateHz),
  };
}

/** A peak this close to a gap may be the straight line's own. */
const RAW_MARGIN = 2;
/** Fewer samples than this show no peak. */
const SAMPLES_LEAST = 8;
const NOT_DECK = notMeasurable('the band rule is for deck acceleration');

const notInBand = (
  none: Measured,
): Pick<ChannelMeasures, 'bandPeak' | 'bandPeakMicros' | 'rms' | 'limits' | 'dominantHz'> => ({
  bandPeak: none,
  bandPeakMicros: null,
  rms: none,
  limits: [],
  dominantHz: none,
});

interface BandSignal {
  upToHz: number;
  limits: Limit[];
  signal: Float64Array;
  peak: number;
  index: number;
  /** r.m.s. of the quiet part in this band. */
  noise: number | null;
  note: string | undefined;
}

/**
 * The zero-phase band signal and its peak for each band edge that a limit asks for; the code's band where there is no
 * limit. None where all samples are too close to a gap.
 */
function bandSignals(bridge: BridgeDefinition, channel: RecordChannel, from: number, to: number): BandSignal[] {
  const byEdge = new Map<number, Limit[]>();
  const span = spanAt(bridge, channel.sensor.alongM);
  for (const limit of bridge.limits.filter(({ spans }) => spans?.includes(span.id) ?? true)) {
    const { upToHz } = bandOfLimit(bridge, limit.band, channel.sensor);
    byEdge.set(upToHz, [...(byEdge.get(upToHz) ?? []), limit]);
  }
  if (byEdge.size === 0) byEdge.set(bandOfLimit(bridge, 'EN 1990 A2', channel.sensor).upToHz, []);
  return [...byEdge].flatMap(([upToHz, limits]) => {
    const wide = !canFilter(upToHz, channel.rateHz);
    const signal = wide ? channel.x : zeroPhase(zeroPhaseLowpass(RULE.bandOrder, upToHz, channel.rateHz), channel.x);
    const found = largestOf(channel, signal, from, to, Math.ceil(channel.rateHz / upToHz));
    if (found === null) return [];
    const note = wide
      ? `the rate of ${channel.rateHz} Hz is too low to filter at ${upToHz} Hz; nothing was filtered`
      : undefined;
    const noise = channel.noise === null ? null : quietRms(signal, channel.quietTo);
    return [{ upToHz, limits, signal, peak: Math.abs(found.value), index: found.index, noise, note }];
  });
}

/** The true peak of the parts that hold samples; null where there are none to speak of. */
function largestOf(
  channel: RecordChannel,
  signal: Float64Array,
  from: number,
  to: number,
  margin: number,
): TruePeak | null {
  let most: TruePeak | null = null;
  for (const [first, last] of solidParts(channel, from, to, margin)) {
    if (last - first < SAMPLES_LEAST) continue;
    const peak = truePeak(signal, first, last);
    if (most === null || Math.abs(peak.value) > Math.abs(most.value)) most = peak;
  }
  return most;
}

function againstLimit(
  channel: RecordChannel,
  band: BandSignal,
  limit: Limit,
  [from, to]: [number, number],
  doubt: string | undefined,
): LimitMeasures {
  const severity = severityOf(band.peak, limit.levels);
  const factor = 2 ** Math.min(4, Math.max(0, Math.ceil(Math.log2((POINTS_A_SWING * band.upToHz) / channel.rateHz))));
  const dense = severity === null ? new Float64Array(0) : denser(band.signal, from, to, factor);
  const timeAboveS: Record<string, number> = {};
  const halfWavesAbove: Record<string, number> = {};
  for (const level of SEVERITIES) {
    const limitValue = limit.levels[level];
    if (limitValue === undefined) continue;
    const { secondsAbove, count } = excursions(dense, limitValue, channel.rateHz * factor);
    timeAboveS[level] = secondsAbove;
    // A crest may pass the level between two of the points.
    halfWavesAbove[level] = Math.max(count, band.peak > limitValue ? 1 : 0);
  }
  return {
    limit: limit.id,
    upToHz: band.upToHz,
    peak: bandValue(band, doubt),
    micros: microsOf(channel, band.index),
    severity,
    timeAboveS,
    halfWavesAbove,
  };
}

/** Straight lines between so many points a swing of the highest frequency lose 1 % of its height. */
const POINTS_A_SWING = 20;

function noiseAndOffset(channel: RecordChannel, { noQuiet }: EventWords): { offset: Measured; noise: Measured } {
  const { offset, offsetError, noise } = channel;
  if (offset === null || noise === null) {
    const none = notMeasurable(noQuiet);
    return { offset: none, noise: none };
  }
  return { offset: measured(offset, offsetError), noise: measured(noise, null) };
}

function doubtOf(channel: RecordChannel, cut: CutShort, words: EventWords): string | undefined {
  const flags = channel.flags.length > 0 ? `sensor: ${channel.flags.join(', ')}` : undefined;
  const bound = cut ?? (channel.flags.includes('gap') ? words.gaps : undefined);
  if (bound === undefined) return flags;
  return `${LOWER_BOUND}: ${bound}${flags === undefined ? '' : `; ${flags}`}`;
}

/** A peak is uncertain by the noise of its band that rides on it. */
function peakValue(magnitude: number, noise: number | null, doubt: string | undefined, note?: string): Measured {
  const quality = doubt !== undefined ? 'poor' : note === undefined ? 'good' : 'usable';
  return measured(Math.abs(magnitude), noise, quality, doubt ?? note);
}

const bandValue = ({ peak, noise, note }: BandSignal, doubt: string | undefined): Measured =>
  peakValue(peak, noise, doubt, note);

function quietRms(signal: Float64Array, to: number): number {
  let squares = 0;
  for (let i = 0; i < to; i++) squares += signal[i]! * signal[i]!;
  return Math.sqrt(squares / Math.max(1, to));
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
  const top = highestCrest(power);
  if (top === null) return notMeasurable('no frequency stands out around the peak');
  const [a, b, c] = [power[top - 1]!, power[top]!, power[top + 1]!].map((p) => Math.log(p + 1e-300)) as [
    number,
    number,
    number,
  ];
  const bend = a - 2 * b + c;
  const shift = bend < 0 ? (0.5 * (a - c)) / bend : 0;
  return measured(((top + shift) * rateHz) / size, rateHz / size / 4);
}

/** A crest, not merely the highest line: a slow drift raises the lowest lines without a frequency of its own. */
function highestCrest(power: Float64Array): number | null {
  let top: number | null = null;
  for (let k = 2; k < power.length - 1; k++) {
    const crest = power[k]! >= power[k - 1]! && power[k]! > power[k + 1]!;
    if (crest && (top === null || power[k]! > power[top]!)) top = k;
  }
  return top;
}
