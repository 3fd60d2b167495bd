import { spanAt, type BridgeDefinition } from '../contract/bridge.ts';
import { measured, notMeasurable, type Measured } from '../contract/measure.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { lowpass } from '../signal/butterworth.ts';
import { identifyDecay } from '../signal/decay.ts';
import { quantile } from '../signal/robust.ts';
import { zeroPhase } from '../signal/zero-phase.ts';
import { rangeOf, trusted, type RecordChannel } from './record.ts';

export interface FreeDecay {
  f1Hz: Measured;
  zeta1: Measured;
  /** Where the ringing sinks into the noise, or the window ends. */
  endMicros: Micros;
}

/** Kept away from the last axle, s: its approach noise and the filter's memory. */
const MARGIN_SECONDS = 0.1;
/** A fit needs this many cycles of the mode (common practice: five). */
const CYCLES_LEAST = 5;

/**
 * Frequency and damping of the first mode from what rings after the last axle has left: all trusted deck channels of
 * the span that rings most, one mode in common.
 */
export function measureFreeDecay(
  bridge: BridgeDefinition,
  record: readonly RecordChannel[],
  triggerMicros: Micros,
  offMicros: Micros,
  toMicros: Micros,
): FreeDecay {
  const startMicros = offMicros + MARGIN_SECONDS * MICROS_PER_SECOND;
  const none = (reason: string, endMicros = toMicros): FreeDecay => ({
    f1Hz: notMeasurable(reason),
    zeta1: notMeasurable(reason),
    endMicros,
  });
  if (startMicros >= toMicros) return none('the record ends with the event: no free decay in it');
  const group = ringingSpan(
    bridge,
    record.filter((channel) => channel.deck && trusted(channel)),
    startMicros,
    toMicros,
  );
  if (group === null) return none('no deck channel that may be trusted');
  const { channels, expectedHz } = group;
  const endMicros = noiseReached(channels, expectedHz, triggerMicros, startMicros, toMicros);
  const seconds = (endMicros - startMicros) / MICROS_PER_SECOND;
  if (seconds < CYCLES_LEAST / (expectedHz ?? 5)) {
    return none(`free decay of ${Math.max(0, seconds).toFixed(1)} s is too short`, endMicros);
  }
  const rateHz = channels[0]!.rateHz;
  const slices = channels.map((channel) => {
    const [from, to] = rangeOf(channel, startMicros, endMicros);
    return channel.x.slice(from, to);
  });
  const length = Math.min(...slices.map((slice) => slice.length));
  const found = identifyDecay(
    slices.map((slice) => slice.subarray(0, length)),
    rateHz,
    expectedHz === undefined ? {} : { expectedHz },
  );
  if (!('verdict' in found)) return none(found.reason, endMicros);
  const mode = found.modes[0];
  if (mode === undefined) return none('no mode was found', endMicros);
  const { verdict: quality, reason } = found;
  return {
    f1Hz: measured(mode.frequencyHz, mode.frequencyStandardError, quality, reason),
    zeta1: measured(mode.dampingRatio, mode.dampingStandardError, quality, reason),
    endMicros,
  };
}

interface Group {
  /** The one that rings most first. */
  channels: RecordChannel[];
  expectedHz: number | undefined;
}

/** The channels of the span that rings most, all of one rate. */
function ringingSpan(
  bridge: BridgeDefinition,
  channels: readonly RecordChannel[],
  fromMicros: Micros,
  toMicros: Micros,
): Group | null {
  const strength = (channel: RecordChannel): number => {
    const [from, to] = rangeOf(channel, fromMicros, toMicros);
    let sum = 0;
    for (let i = from; i < to; i++) sum += channel.x[i]! * channel.x[i]!;
    return sum / channel.rateHz;
  };
  let strongest: RecordChannel | undefined;
  let most = -1;
  for (const channel of channels) {
    const s = strength(channel);
    if (s > most) {
      most = s;
      strongest = channel;
    }
  }
  if (strongest === undefined) return null;
  const span = spanAt(bridge, strongest.sensor.alongM);
  const { rateHz } = strongest;
  return {
    channels: [
      strongest,
      ...channels.filter(
        (channel) =>
          channel !== strongest && channel.rateHz === rateHz && spanAt(bridge, channel.sensor.alongM).id === span.id,
      ),
    ],
    expectedHz: span.frequenciesHz?.f1,
  };
}

/** The free part ends where the low-passed motion of the strongest channel comes down to its quiet level. */
function noiseReached(
  channels: readonly RecordChannel[],
  expectedHz: number | undefined,
  triggerMicros: Micros,
  fromMicros: Micros,
  toMicros: Micros,
): Micros {
  const channel = channels[0]!;
  if (channel.noise === null || channel.noise === 0) return toMicros;
  const edge = Math.min(1.6 * (expectedHz ?? 10), 0.4 * channel.rateHz);
  const y = zeroPhase(lowpass(4, edge, channel.rateHz), channel.x);
  const width = Math.max(1, Math.round(channel.rateHz / 2));
  const [, quietTo] = rangeOf(channel, channel.startMicros, triggerMicros - MICROS_PER_SECOND / 2);
  const rms = (at: number): number => {
    let sum = 0;
    for (let i = at; i < at + width; i++) sum += (y[i] ?? 0) ** 2;
    return Math.sqrt(sum / width);
  };
  const quiet: number[] = [];
  for (let at = width; at + width < quietTo; at += width) quiet.push(rms(at));
  const floor = quiet.length === 0 ? channel.noise : quantile(quiet, 0.5);
  const [from, to] = rangeOf(channel, fromMicros, toMicros);
  for (let at = from; at + width < to; at += Math.ceil(width / 2)) {
    if (rms(at) < 1.5 * floor)
      return Math.min(toMicros, fromMicros + Math.round(((at - from + width) * MICROS_PER_SECOND) / channel.rateHz));
  }
  return toMicros;
}
