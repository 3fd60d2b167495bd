import type { Micros } from '#core/contract/time.ts';
import type { BridgeModel } from './model.ts';
import { poleAt, REFERENCE_AMPLITUDE_MS2 } from './model.ts';
import { extent, type SceneEvent } from './nuisance.ts';
import { offMicros, speedAtMiddle, type PassageEvent } from './passage.ts';
import type { Train } from './train.ts';

/** What really happened in one passage. Plain data, to be written beside the samples. */
export interface PassageTruth {
  train: Train;
  /** First axle reaches the bridge; last axle leaves it. */
  onMicros: Micros;
  offMicros: Micros;
  direction: 'rising' | 'falling';
  track: number;
  /** Mean over the axles of their speed at mid bridge; of the first and of the last axle. */
  speedMs: number;
  firstAxleSpeedMs: number;
  lastAxleSpeedMs: number;
  stopped: boolean;
  spans: SpanTruth[];
  steelC: number;
  /** Largest deck acceleration without noise or sensor faults, from on until 4 s after off or the next on. */
  peaks: ChannelPeak[];
  /** Kinds of nuisances that overlapped it. */
  nuisances: string[];
}

export interface SpanTruth {
  span: string;
  /** Undamped frequency and damping ratio of the first bending mode at vanishing and at the reference amplitude. */
  f1AtZeroHz: number;
  f1Hz: number;
  zeta1AtZero: number;
  zeta1: number;
}

export interface ChannelPeak {
  sensor: string;
  peakMs2: number;
  micros: Micros;
}

/** How long after the last axle the peak is looked for, s. */
export const PEAK_TAIL_S = 4;

export function passageTruth(event: PassageEvent, model: BridgeModel, events: readonly SceneEvent[]): PassageTruth {
  const off = offMicros(event, model.lengthM);
  const speed = speedAtMiddle(event, model.lengthM);
  return {
    train: event.train,
    onMicros: event.onMicros,
    offMicros: off,
    direction: event.direction,
    track: event.track ?? 0,
    speedMs: speed.mean,
    firstAxleSpeedMs: speed.axles[0]!,
    lastAxleSpeedMs: speed.axles.at(-1)!,
    stopped: event.stop !== undefined,
    spans: spanTruths(model, event.onMicros),
    steelC: model.weather.steelC(event.onMicros),
    peaks: [],
    nuisances: nuisancesDuring(event, off, events, model.lengthM),
  };
}

/** State of the first bending mode of each span at a moment. */
export function spanTruths(model: BridgeModel, micros: Micros): SpanTruth[] {
  const firsts = model.modes.filter(
    (mode, i) => mode.kind === 'bending' && model.modes.findIndex((other) => other.span === mode.span) === i,
  );
  return firsts.map((mode) => {
    const law = model.lawAt(mode, micros);
    const zero = poleAt(law, 0);
    const reference = poleAt(law, REFERENCE_AMPLITUDE_MS2);
    return {
      span: mode.span.id,
      f1AtZeroHz: zero.frequencyHz,
      f1Hz: reference.frequencyHz,
      zeta1AtZero: zero.zeta,
      zeta1: reference.zeta,
    };
  });
}

function nuisancesDuring(
  passage: PassageEvent,
  off: Micros,
  events: readonly SceneEvent[],
  bridgeLengthM: number,
): string[] {
  const names = new Set<string>();
  if (passage.stop !== undefined) names.add('stop');
  for (const event of events) {
    if (event === passage) continue;
    if (event.kind === 'passage') {
      const meets = event.onMicros < off && offMicros(event, bridgeLengthM) > passage.onMicros;
      if (meets) names.add('meet');
    } else {
      const { fromMicros, toMicros } = extent(event);
      if (fromMicros < off && toMicros > passage.onMicros) names.add(event.kind === 'fault' ? event.what : event.kind);
    }
  }
  return [...names];
}

/** A stretch of time with at least one axle between the first and the last of some train on the bridge. */
export interface Occupation {
  onMicros: Micros;
  offMicros: Micros;
  /** Indices of its trains in the list given. */
  trains: number[];
}

/**
 * What a monitor can tell apart: trains whose times on the bridge overlap make one occupation.
 *
 * @param truths in any order
 */
export function occupations(truths: readonly PassageTruth[]): Occupation[] {
  const order = truths.map((_, i) => i).sort((a, b) => truths[a]!.onMicros - truths[b]!.onMicros);
  const found: Occupation[] = [];
  for (const i of order) {
    const { onMicros, offMicros: off } = truths[i]!;
    const last = found.at(-1);
    if (last !== undefined && onMicros <= last.offMicros) {
      last.offMicros = Math.max(last.offMicros, off);
      last.trains.push(i);
    } else found.push({ onMicros, offMicros: off, trains: [i] });
  }
  return found;
}
