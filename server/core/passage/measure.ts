import type { BridgeDefinition } from '../contract/bridge.ts';
import {
  isLowerBound,
  LOWER_BOUND,
  measured,
  notMeasurable,
  type Measured,
  type Quality,
} from '../contract/measure.ts';
import type { ChannelMeasures, Cut, LimitMeasures, Passage } from '../contract/passage.ts';
import type { WindowChannel } from '../contract/pipeline.ts';
import { severityRank } from '../contract/severity.ts';
import { MICROS_PER_SECOND } from '../contract/time.ts';
import { mad, median } from '../signal/robust.ts';
import { readAxles, type AxleReading } from './axles.ts';
import { bandOfLimit, canFilter } from './band.ts';
import { measureFreeDecay } from './free-decay.ts';
import { noiseSpeed } from './noise-speed.ts';
import { eventWords, measureChannel, type CutShort } from './peaks.ts';
import { findPhases, type FoundPhases, type PassageFrame } from './phases.ts';
import { arrangeRecord, microsOf, trusted, type RecordChannel } from './record.ts';
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
  const record = arrangeRecord(bridge, channels, frame.triggerMicros, frame.toMicros, frame.whole);
  const dynamic = record.filter(({ sensor }) => sensor.quantity !== 'temperature');
  const axles = readAxles(bridge, dynamic);
  const noise = rollingNoise(bridge, dynamic, frame.triggerMicros);
  const span = noise === null ? null : noiseSpan(noise);
  const found = findPhases(bridge, frame, axles, span, record);
  if (found === null) return null;
  const { onMicros, offMicros } = found;
  const cut = frame.cut === null ? null : cutShort(frame.cut, dynamic, axles, found);
  const words = eventWords(isTrain(found), frame.whole === true);
  const measures = dynamic.map((channel) =>
    measureChannel(bridge, channel, onMicros - 200_000, frame.toMicros, cut, words),
  );
  const decay = measureFreeDecay(bridge, dynamic, frame.triggerMicros, offMicros, frame.toMicros);
  const speed = speedOf(axles, noise, found);
  const speaking = speakingOf(dynamic, measures);
  const peak = peakOf(bridge, speaking);
  const notes = [
    ...found.notes,
    ...axles.notes,
    ...(cut === null ? [] : [cut]),
    ...recordNotes(frame, dynamic, isTrain(found)),
  ];
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
    cut: frame.cut,
    phases: { ...found, freeEndMicros: Math.max(decay.endMicros, offMicros) },
    speedMs: speed.speedMs,
    direction: speed.direction,
    axleCount: cut === null ? axles.count : boundOf(axles.count, cut),
    axles: axles.axles,
    peak,
    rawPeak: rawPeakOf(speaking),
    f1Hz: decay.f1Hz,
    zeta1: decay.zeta1,
    temperatureC: temperatureOf(record),
    channels: measures,
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
  if (!isTrain(phases) && axles.speedMs.value === null) {
    return { speedMs: notMeasurable('no train was recognised'), direction: null };
  }
  if (axles.speedMs.value !== null || axles.trains > 1 || noise === null) {
    return { speedMs: axles.speedMs, direction: axles.direction };
  }
  return noiseSpeed(noise, phases.onMicros, phases.offMicros);
}

/** Whether a train was recognised: axles were seen, or wheels were heard. */
function isTrain({ foundBy }: FoundPhases): boolean {
  return foundBy === 'axle sensors' || foundBy === 'wheel-rail noise';
}

/** The bogies of a train are this far apart at most: after so much silence its last axle has passed. */
const SILENCE_SECONDS_LEAST = 0.3;

/** Why the record may not hold the whole train: samples begin or stop within a bogie's distance of an axle. */
function cutShort(cut: Cut, record: readonly RecordChannel[], axles: AxleReading, phases: FoundPhases): CutShort {
  const { value: speed } = axles.speedMs;
  const silence =
    speed === null ? RULE.quietSeconds : Math.min(RULE.quietSeconds, RULE.bogieDistanceM / Math.abs(speed));
  const needed = Math.max(SILENCE_SECONDS_LEAST, silence);
  if (cut === 'begin') {
    const first = Math.min(...record.map((channel) => microsOf(channel, 0)));
    const before = (phases.onMicros - first) / MICROS_PER_SECOND;
    return before < needed ? `the recording begins ${before.toFixed(2)} s before the first axle that was seen` : null;
  }
  const last = Math.max(...record.map((channel) => microsOf(channel, lastSample(channel))));
  const after = (last - phases.offMicros) / MICROS_PER_SECOND;
  return after < needed ? `the recording stops ${after.toFixed(2)} s after the last axle that was seen` : null;
}

/** A gap that reaches the end of the window lies behind the last sample. */
function lastSample({ x, gaps }: RecordChannel): number {
  const tail = gaps.at(-1);
  return (tail?.to === x.length ? tail.from : x.length) - 1;
}

function boundOf(count: Measured, cut: string): Measured {
  return count.value === null ? count : measured(count.value, null, 'poor', `${LOWER_BOUND}: ${cut}`);
}

/** The channels that speak for the deck: those that may be trusted; all that move where none may. */
interface Speaking {
  used: readonly ChannelMeasures[];
  trustworthy: boolean;
}

function speakingOf(record: readonly RecordChannel[], measures: readonly ChannelMeasures[]): Speaking {
  const moving = measures.filter((_, i) => record[i]!.deck && !record[i]!.flags.includes('flat'));
  const good = measures.filter((_, i) => record[i]!.deck && trusted(record[i]!));
  return { used: good.length > 0 ? good : moving, trustworthy: good.length > 0 };
}

/** The gravest reading. */
function peakOf(bridge: BridgeDefinition, { used, trustworthy }: Speaking): Passage['peak'] {
  const worst = used
    .flatMap(({ sensor, limits }) => limits.map((said) => ({ ...said, sensor, ofGravest: ofGravest(bridge, said) })))
    .sort(graver)[0];
  if (worst !== undefined) {
    const { sensor, micros, limit, severity } = worst;
    return {
      measured: believed(worst.peak, trustworthy),
      sensor,
      micros,
      limit,
      severity,
      ofGravest: worst.ofGravest,
    };
  }
  const free = used.toSorted((a, b) => (b.bandPeak.value ?? 0) - (a.bandPeak.value ?? 0))[0];
  return {
    measured: free === undefined ? notMeasurable('no deck channel with samples') : believed(free.bandPeak, trustworthy),
    sensor: free?.sensor ?? null,
    micros: free?.bandPeakMicros ?? null,
    limit: null,
    severity: null,
    ofGravest: null,
  };
}

/** A peak that no trusted channel saw is poor. */
function believed(peak: Measured, trustworthy: boolean): Measured {
  if (trustworthy || peak.value === null) return peak;
  const why = 'no channel that may be trusted';
  return measured(
    peak.value,
    peak.standardError,
    'poor',
    isLowerBound(peak) ? `${peak.reason!}; ${why}` : `${why}${peak.reason === undefined ? '' : `; ${peak.reason}`}`,
  );
}

/** Value over the gravest level that is set. */
function ofGravest(bridge: BridgeDefinition, { limit: id, peak }: LimitMeasures): number {
  const { levels } = bridge.limits.find((limit) => limit.id === id)!;
  return peak.value! / Math.max(...Object.values(levels));
}

/** Gravest first; at equal severity the one nearest to its limit. */
function graver(a: LimitMeasures & { ofGravest: number }, b: LimitMeasures & { ofGravest: number }): number {
  return severityRank(b.severity) - severityRank(a.severity) || b.ofGravest - a.ofGravest;
}

function rawPeakOf({ used, trustworthy }: Speaking): Measured {
  const [top] = used.map(({ rawPeak }) => rawPeak).toSorted((a, b) => (b.value ?? -1) - (a.value ?? -1));
  return top === undefined ? notMeasurable('no deck channel with samples') : believed(top, trustworthy);
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
function recordNotes(frame: PassageFrame, record: readonly RecordChannel[], train: boolean): string[] {
  const notes: string[] = [];
  const before = (frame.triggerMicros - frame.fromMicros) / MICROS_PER_SECOND;
  if (before < RULE.beforeSeconds - 0.2 && frame.whole !== true)
    notes.push(`quiet part of only ${before.toFixed(1)} s before the ${train ? 'train' : 'event'}`);
  const flagged = record.filter(({ flags }) => flags.length > 0);
  for (const { sensor, flags } of flagged) notes.push(`${sensor.id}: ${flags.join(', ')}`);
  for (const { sensor, filled } of record) {
    if (filled > 0) notes.push(`${sensor.id}: ${filled} missing ${filled === 1 ? 'sample' : 'samples'} filled in`);
  }
  return notes;
}

function filterOf(bridge: BridgeDefinition, record: readonly RecordChannel[]): Passage['provenance']['filter'] {
  const deck = record.filter((channel) => channel.deck);
  const { upToHz, setBy } = bandOfLimit(
    bridge,
    bridge.limits[0]?.band ?? 'EN 1990 A2',
    deck[0]?.sensor ?? { alongM: 0 },
  );
  const filtered = deck.filter(({ rateHz }) => canFilter(upToHz, rateHz)).length;
  return {
    kind:
      filtered === deck.length
        ? 'Butterworth low-pass'
        : `Butterworth low-pass on ${filtered} of ${deck.length} channels; the others are sampled too slowly for it`,
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
