import type { BridgeDefinition } from '../contract/bridge.ts';
import { measured, notMeasurable, type Measured, type Quality } from '../contract/measure.ts';
import type { Passage } from '../contract/passage.ts';
import type { WindowChannel } from '../contract/pipeline.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { mad, median } from '../signal/robust.ts';
import { readAxles, type AxleReading } from './axles.ts';
import { bandOfLimit } from './band.ts';
import { measureFreeDecay } from './free-decay.ts';
import { noiseSpeed } from './noise-speed.ts';
import { measureChannel, worseReading, type ChannelReading } from './peaks.ts';
import { findPhases, type FoundPhases, type PassageFrame } from './phases.ts';
import { arrangeRecord, trusted, type RecordChannel } from './record.ts';
import { noiseSpan, rollingNoise, type RollingNoise } from './rolling-noise.ts';
import { RULE, RULE_VERSION } from './rule.ts';

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
