import { spanAt, type BridgeDefinition } from '../contract/bridge.ts';
import { measured, notMeasurable, type Measured, type Quality } from '../contract/measure.ts';
import type { Passage, Phases } from '../contract/passage.ts';
import type { WindowChannel } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND, type Micros } from '../contract/time.ts';
import { mad, median } from '../signal/robust.ts';
import { readAxles, type AxleReading } from './axles.ts';
import { bandOfLimit } from './band.ts';
import { firstDriven, lastDriven, type Edge } from './forced-edge.ts';
import { measureFreeDecay } from './free-decay.ts';
import { noiseSpeed } from './noise-speed.ts';
import { measureChannel, worseReading, type ChannelReading } from './peaks.ts';
import { arrangeRecord, trusted, type RecordChannel } from './record.ts';
import { noiseSpan, rollingNoise, type NoiseSpan, type RollingNoise } from './rolling-noise.ts';
import { RULE, RULE_VERSION } from './rule.ts';

/** The stretch of event time that a passage is computed from. */
export interface PassageFrame {
  id: string;
  triggerMicros: Micros;
  fromMicros: Micros;
  toMicros: Micros;
  /** True where a person says that the whole stretch is one event, train or not. */
  whole?: boolean;
}

/**
 * Measures a passage from the samples of its window: a pure function of window, definition and rules, so that it can
 * be computed again to the same bits at any time, on any machine.
 *
 * @param bridge definition in force
 * @param definitionVersion its number, kept in the record
 * @param frame id and bounds of the window
 * @param channels calibrated float32 samples in SI (m/s², µm/m, mm, °C), runs without gaps
 * @returns the record; null where the window holds no train (a hammer, wind, a loose cable)
 */
export function measurePassage(
  bridge: BridgeDefinition,
  definitionVersion: number,
  frame: PassageFrame,
  channels: readonly WindowChannel[],
): Passage | null {
  const record = arrangeRecord(bridge, channels, frame.triggerMicros, frame.toMicros);
  const dynamic = record.filter(({ sensor }) => sensor.quantity !== 'temperature');
  const axles = readAxles(bridge, dynamic);
  const noise = rollingNoise(bridge, dynamic, frame.triggerMicros);
  const span = noise === null ? null : noiseSpan(noise);
  const found = findPhases(bridge, frame, axles, span, record);
  if (found === null) return null;
  const { onMicros, offMicros } = found;
  const readings = dynamic.map((channel) => measureChannel(bridge, channel, onMicros - 200_000, frame.toMicros));
  const decay = measureFreeDecay(bridge, dynamic, frame.triggerMicros, offMicros, frame.toMicros);
  const speed = speedOf(axles, noise, found);
  const peak = peakOf(dynamic, readings);
  const notes = [...found.notes, ...axles.notes, ...recordNotes(frame, dynamic)];
  const quality = worstOf([
    found.quality,
    ...(peak.measured.value === null ? (['poor'] as const) : [peak.measured.quality]),
  ]);
  return {
    id: frame.id,
    bridge: bridge.id,
    startMicros: frame.fromMicros,
    endMicros: frame.toMicros,
    triggerMicros: frame.triggerMicros,
    phases: { ...found, freeEndMicros: Math.max(decay.endMicros, offMicros) },
    speedMs: speed.speedMs,
    direction: speed.direction,
    axleCount: axles.count,
    axles: axles.axles,
    peak,
    rawPeak: largest(dynamic, readings, ({ measures }) => measures.rawPeak),
    f1Hz: decay.f1Hz,
    zeta1: decay.zeta1,
    temperatureC: temperatureOf(record),
    channels: readings.map(({ measures }) => measures),
    quality,
    notes,
    provenance: { definitionVersion, ruleVersion: RULE_VERSION, filter: filterOf(bridge, dynamic) },
  };
}

type FoundPhases = Omit<Phases, 'freeEndMicros'>;

/** Rolling for this long makes a train where no axle sensor speaks; a single blow rings for less. */
const SUSTAINED_SECONDS = 0.3;
/** The same where one axle sensor is there but says nothing; two that say nothing are believed. */
const SUSTAINED_UNHEARD_SECONDS = 0.8;
/** Noise that falls by so much within a second rings off after a blow; no train so short grows that quiet. */
const BLOW_SECONDS = 1;
const BLOW_FALL = 3;

function findPhases(
  bridge: BridgeDefinition,
  frame: PassageFrame,
  axles: AxleReading,
  span: NoiseSpan | null,
  record: readonly RecordChannel[],
): FoundPhases | null {
  if (axles.onMicros !== null && axles.offMicros !== null && axles.offMicros > axles.onMicros) {
    return byAxles(axles, axles.onMicros, axles.offMicros, span);
  }
  const listening = record.filter((channel) => channel.axles && !channel.flags.includes('flat')).length;
  const heard = axles.firstPulse !== null;
  const least = listening === 0 || heard ? SUSTAINED_SECONDS : SUSTAINED_UNHEARD_SECONDS;
  const denied = listening >= 2 && !heard;
  const blow = span !== null && !heard && span.sustainedSeconds < BLOW_SECONDS && span.fall > BLOW_FALL;
  if (span !== null && !denied && !blow && span.sustainedSeconds >= least) {
    const notes = listening > 0 ? ['the axle sensors did not see the whole train'] : [];
    return { ...sharpened(bridge, frame, span, axles, record), foundBy: 'wheel-rail noise', quality: 'usable', notes };
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
function onEdge(byNoise: Micros, byMotion: Edge | null): Micros {
  if (byMotion === null) return byNoise;
  const near = Math.abs(byMotion.micros - byNoise) <= EDGE_APART_SECONDS * MICROS_PER_SECOND;
  return near ? byMotion.micros : Math.min(byNoise, byMotion.micros);
}

/**
 * The last axle: what rings in the band of the noise makes it end late, and a light train may leave the deck all but
 * unmoved. Where the two are far apart and neither is to blame, one of them has not seen the last axle.
 */
function offEdge(byNoise: Micros, byMotion: Edge | null, clear: boolean): Micros {
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

function speedOf(
  axles: AxleReading,
  noise: RollingNoise | null,
  phases: FoundPhases,
): Pick<Passage, 'speedMs' | 'direction'> {
  if (axles.speedMs.value !== null || axles.trains > 1 || noise === null) {
    return { speedMs: axles.speedMs, direction: axles.direction };
  }
  return noiseSpeed(noise, phases.onMicros, phases.offMicros);
}

function peakOf(record: readonly RecordChannel[], readings: readonly ChannelReading[]): Passage['peak'] {
  const deck = readings.filter((_, i) => record[i]!.deck && !record[i]!.flags.includes('flat'));
  const good = readings.filter((_, i) => record[i]!.deck && trusted(record[i]!));
  const used = good.length > 0 ? good : deck;
  const worst = used
    .flatMap((reading) => reading.readings.map((limit) => ({ ...limit, reading })))
    .sort(worseReading)[0];
  if (worst !== undefined) {
    const { bandPeak, sensor } = worst.reading.measures;
    const error = bandPeak.value === null ? null : bandPeak.standardError;
    const doubt = good.length > 0 ? undefined : 'no channel that may be trusted';
    const quality = doubt === undefined && bandPeak.value !== null ? bandPeak.quality : 'poor';
    return {
      measured: measured(worst.value, error, quality, doubt ?? (bandPeak.value === null ? undefined : bandPeak.reason)),
      sensor,
      micros: worst.micros,
      limit: worst.limit,
      severity: worst.severity,
      ofGravest: worst.ofGravest,
    };
  }
  const free = used
    .map(({ measures }) => measures)
    .sort((a, b) => (b.bandPeak.value ?? 0) - (a.bandPeak.value ?? 0))[0];
  return {
    measured: free?.bandPeak ?? notMeasurable('no deck channel with samples'),
    sensor: free?.sensor ?? null,
    micros: free?.bandPeakMicros ?? null,
    limit: null,
    severity: null,
    ofGravest: null,
  };
}

function largest(
  record: readonly RecordChannel[],
  readings: readonly ChannelReading[],
  pick: (reading: ChannelReading) => Measured,
): Measured {
  const deck = readings.filter((_, i) => record[i]!.deck && trusted(record[i]!)).map(pick);
  return deck.reduce<Measured>(
    (most, next) => ((next.value ?? -1) > (most.value ?? -1) ? next : most),
    notMeasurable('no deck channel that may be trusted'),
  );
}

function temperatureOf(record: readonly RecordChannel[]): Measured {
  const probes = record.filter(({ sensor, x }) => sensor.quantity === 'temperature' && x.length > 0);
  const steel = probes.filter(({ sensor }) => sensor.mount !== 'air');
  const used = steel.length > 0 ? steel : probes;
  const values = used.map((probe) => median(probe.x) + probe.base);
  if (values.length === 0) return notMeasurable('no temperature sample near the passage');
  return measured(median(values), values.length > 1 ? mad(values) : null);
}

/** Said of the window as a whole. */
function recordNotes(frame: PassageFrame, record: readonly RecordChannel[]): string[] {
  const notes: string[] = [];
  const before = (frame.triggerMicros - frame.fromMicros) / MICROS_PER_SECOND;
  if (before < RULE.beforeSeconds - 0.2 && frame.whole !== true)
    notes.push(`quiet part of only ${before.toFixed(1)} s before the train`);
  const flagged = record.filter(({ flags }) => flags.length > 0);
  for (const { sensor, flags } of flagged) notes.push(`${sensor.id}: ${flags.join(', ')}`);
  return notes;
}

function filterOf(bridge: BridgeDefinition, record: readonly RecordChannel[]): Passage['provenance']['filter'] {
  const sensor = record.find(({ deck }) => deck)?.sensor ?? { alongM: 0 };
  const { upToHz, setBy } = bandOfLimit(bridge, bridge.limits[0]?.band ?? 'EN 1990 A2', sensor);
  return {
    kind: 'Butterworth low-pass',
    order: RULE.bandOrder,
    upToHz,
    rule: setBy,
    phase: 'zero-phase, -3 dB at the edge after both passes',
  };
}

function worstOf(qualities: readonly Quality[]): Quality {
  if (qualities.includes('poor')) return 'poor';
  return qualities.includes('usable') ? 'usable' : 'good';
}
