import { spanAt, type BridgeDefinition } from '../contract/bridge.ts';
import type { Quality } from '../contract/measure.ts';
import type { Cut, Phases } from '../contract/passage.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import type { AxleReading } from './axles.ts';
import { firstDriven, lastDriven, type Edge } from './forced-edge.ts';
import { trusted, type RecordChannel } from './record.ts';
import type { NoiseSpan } from './rolling-noise.ts';

/** The stretch of event time that a passage is computed from. */
export interface PassageFrame {
  id: string;
  triggerMicros: Micros;
  fromMicros: Micros;
  toMicros: Micros;
  cut: Cut | null;
  /** Where a live level was passed without a train: from when to when. */
  above?: { fromMicros: Micros; toMicros: Micros };
  /** True where a person says that the whole stretch is one event, train or not. */
  whole?: boolean;
}

/** When the first axle came and the last one left, and how that is known. */
export type FoundPhases = Omit<Phases, 'freeEndMicros'>;

const NO_TRAIN = 'a level was passed, but no train was recognised: what moved the deck is not known';

/** Rolling for this long makes a train where no axle sensor speaks; a single blow rings for less. */
const SUSTAINED_SECONDS = 0.3;
/** The same where one axle sensor is there but says nothing; two that say nothing are believed. */
const SUSTAINED_UNHEARD_SECONDS = 0.8;
/** Noise that falls by so much within a second rings off after a blow; no train so short grows that quiet. */
const BLOW_SECONDS = 1;
const BLOW_FALL = 3;
/** What is loud for longer in all is no single blow, s: on a short bridge the bogies of a train come one by one. */
const BLOW_LOUD_SECONDS = 2;

/**
 * When a train was on the bridge: by its axles where their sensors saw all of it, else by wheel-rail noise, whose edges
 * the deck's own motion sharpens.
 *
 * @param record all channels of the window
 * @returns null where no train was: a blow, wind, a loose cable
 */
export function findPhases(
  bridge: BridgeDefinition,
  frame: PassageFrame,
  axles: AxleReading,
  span: NoiseSpan | null,
  record: readonly RecordChannel[],
): FoundPhases | null {
  if (frame.above !== undefined) {
    const { fromMicros: onMicros, toMicros: offMicros } = frame.above;
    return { onMicros, offMicros, foundBy: 'live level', quality: 'usable', notes: [NO_TRAIN] };
  }
  if (axles.onMicros !== null && axles.offMicros !== null && axles.offMicros > axles.onMicros) {
    return byAxles(axles, axles.onMicros, axles.offMicros, span);
  }
  const listening = record.filter((channel) => channel.axles && !channel.flags.includes('flat')).length;
  const heard = axles.firstPulse !== null;
  const least = listening === 0 || heard ? SUSTAINED_SECONDS : SUSTAINED_UNHEARD_SECONDS;
  const denied = listening >= 2 && !heard;
  const blow = !heard && span !== null && ringsOff(span);
  if (span !== null && !denied && !blow && span.sustainedSeconds >= least) {
    const notes = listening > 0 ? ['the axle sensors did not see the whole train'] : [];
    return { ...sharpened(bridge, frame, span, axles, record), foundBy: 'wheel-rail noise', quality: 'usable', notes };
  }
  if (axles.heardBy >= 2 && axles.firstPulse !== null && axles.lastPulse !== null) {
    const [onMicros, offMicros] = [axles.firstPulse, axles.lastPulse];
    const notes = ['first and last axle as any axle sensor saw them: the sensors do not agree on the train'];
    return { onMicros, offMicros, foundBy: 'axle sensors', quality: 'poor', notes };
  }
  if (frame.whole === true) {
    return {
      onMicros: frame.fromMicros,
      offMicros: frame.toMicros,
      foundBy: 'given',
      quality: 'usable',
      notes: ['the whole recording is taken as one event'],
    };
  }
  return null;
}

function ringsOff({ sustainedSeconds, loudSeconds, fall }: NoiseSpan): boolean {
  return sustainedSeconds < BLOW_SECONDS && loudSeconds < BLOW_LOUD_SECONDS && fall > BLOW_FALL;
}

/** The free stretches beside a train keep this distance from where noise says that it came and went, s. */
const EDGE_MARGIN_SECONDS = 0.6;
/** How far from there motion is looked at, s. */
const EDGE_REACH_SECONDS = 0.9;
/** How far edge and noise may be apart and still speak of one axle, s. */
const EDGE_APART_SECONDS = 0.3;
/** The deck is driven plainly from here on; below, one last axle in three was off by more than 0.1 s in simulated passages. */
const PLAIN_STRENGTH = 30;

/** Noise finds the train, the deck's own motion finds when its first axle came and its last one left. */
function sharpened(
  bridge: BridgeDefinition,
  frame: PassageFrame,
  span: NoiseSpan,
  axles: AxleReading,
  record: readonly RecordChannel[],
): Pick<Phases, 'onMicros' | 'offMicros'> {
  const deck = record.filter((channel) => channel.deck && trusted(channel));
  const spans = bridge.spans.map(({ id }) => deck.filter(({ sensor }) => spanAt(bridge, sensor.alongM).id === id));
  const margin = EDGE_MARGIN_SECONDS * MICROS_PER_SECOND;
  const reach = EDGE_REACH_SECONDS * MICROS_PER_SECOND;
  const before = { fromMicros: frame.fromMicros, toMicros: span.onMicros - margin };
  const after = {
    fromMicros: span.offMicros + margin,
    toMicros: Math.min(frame.toMicros, span.offMicros + margin + 3 * MICROS_PER_SECOND),
  };
  const on = firstDriven(spans, before, span.onMicros + reach);
  const off = lastDriven(spans, after, span.offMicros - reach);
  return {
    onMicros: Math.min(onEdge(span.onMicros, on), axles.firstPulse ?? Infinity),
    offMicros: Math.max(offEdge(span.offMicros, off, span.clear), axles.lastPulse ?? -Infinity),
  };
}

/**
 * The first axle: the approach of a train is heard before it comes, so the deck's motion is believed also where it is
 * faint, unless the two are so far apart that one of them has not seen the first axle.
 */
export function onEdge(byNoise: Micros, byMotion: Edge | null): Micros {
  if (byMotion === null) return byNoise;
  const near = Math.abs(byMotion.micros - byNoise) <= EDGE_APART_SECONDS * MICROS_PER_SECOND;
  return near ? byMotion.micros : Math.min(byNoise, byMotion.micros);
}

/**
 * The last axle: what rings in the band of the noise makes it end late, and a light train may leave the deck all but
 * unmoved. Where the two are far apart and neither is to blame, one of them has not seen the last axle.
 */
export function offEdge(byNoise: Micros, byMotion: Edge | null, clear: boolean): Micros {
  if (byMotion === null) return byNoise;
  const plain = byMotion.strength >= PLAIN_STRENGTH;
  const near = Math.abs(byMotion.micros - byNoise) <= EDGE_APART_SECONDS * MICROS_PER_SECOND;
  if (near) return plain || !clear ? byMotion.micros : byNoise;
  return plain && !clear ? byMotion.micros : Math.max(byNoise, byMotion.micros);
}

/** Axle sensors settle the phases; noise that goes on far longer than they say is worth a word. */
function byAxles(axles: AxleReading, onMicros: Micros, offMicros: Micros, span: NoiseSpan | null): FoundPhases {
  const notes: string[] = [];
  const away = span === null ? 0 : Math.max(onMicros - span.onMicros, span.offMicros - offMicros) / MICROS_PER_SECOND;
  if (away > 1) notes.push(`wheel-rail noise reaches ${away.toFixed(1)} s beyond the axles; a second train?`);
  const quality: Quality =
    notes.length > 0 || axles.count.value === null || axles.count.quality !== 'good' ? 'usable' : 'good';
  return { onMicros, offMicros, foundBy: 'axle sensors', quality, notes };
}
