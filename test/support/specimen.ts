import type { Alarm } from '#core/contract/alarm.ts';
import { raise } from '#core/alarm/life.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { measured, notMeasurable, type Measured } from '#core/contract/measure.ts';
import type { ChannelMeasures, Passage } from '#core/contract/passage.ts';
import type { WindowChannel } from '#core/contract/pipeline.ts';
import { severityOf, type Severity } from '#core/contract/severity.ts';
import { MICROS_PER_SECOND, timeName, type Micros } from '#core/contract/time.ts';
import { createRandom } from './random.ts';

/** Invented things to test stores and desks with: small, whole and typed by the contract. */

/** 05:12:33.2 UTC on 1 December 2026. */
export const DAWN: Micros = 1_796_101_953_200_000;

/** A one-span bridge with two deck sensors at midspan, one at a quarter, one beside a bearing, and a thermometer. */
export function aDefinition(over: Partial<BridgeDefinition> = {}): BridgeDefinition {
  const deck = (id: string, alongM: number, acrossM: number): BridgeDefinition['sensors'][number] => ({
    id,
    quantity: 'acceleration',
    logger: 'north',
    mount: 'deck',
    direction: 'vertical',
    alongM,
    acrossM,
    unit: 'm/s2',
    rateHz: 500,
  });
  return {
    spanbeat: 1,
    id: 'ottermere',
    name: 'Ottermere Trough',
    line: { name: 'Invented line', speedKmh: 160 },
    chainageKm: 41.32,
    timeZone: 'Europe/London',
    spans: [{ id: 'main', startM: 0, lengthM: 17.6, structure: 'steel trough', track: 'ballasted' }],
    loggers: [{ id: 'north', silentAfterS: 10 }],
    sensors: [
      deck('A1', 8.8, -1),
      deck('A2', 8.8, 1),
      deck('A3', 4.4, 0),
      deck('A4', 0.5, 0),
      { id: 'T1', quantity: 'temperature', logger: 'north', mount: 'girder', alongM: 8.8, unit: 'Cel', rateHz: 1 },
    ],
    limits: [
      {
        id: 'ballast',
        quantity: 'peak deck acceleration',
        levels: { AL: 2.2, IL: 2.8, IAL: 3.5 },
        band: 'EN 1990 A2',
        source: 'EN 1990 A2.4.4.2.1(4)P',
      },
    ],
    ...over,
  };
}

export interface PassageWish {
  bridge?: string;
  onMicros?: Micros;
  /** Of each deck channel; the largest is the passage's. */
  peaks?: Readonly<Record<string, number>>;
  flags?: Readonly<Record<string, readonly string[]>>;
  speedMs?: number | null;
  direction?: 'rising' | 'falling' | null;
  axles?: number | null;
  quality?: Passage['quality'];
  version?: number;
  limit?: string | null;
}

/** A passage of 20 s whose first axle comes at `onMicros`. */
export function aPassage(wish: PassageWish = {}): Passage {
  const { bridge = 'ottermere', onMicros = DAWN, peaks = { A1: 1, A2: 0.9, A3: 0.7, A4: 0.2 } } = wish;
  const { speedMs = 44.4, direction = 'rising', axles = 32, quality = 'good', version = 1, limit = 'ballast' } = wish;
  const [sensor, peak] = Object.entries(peaks).toSorted((a, b) => b[1] - a[1])[0] ?? [null, null];
  const levels = aDefinition().limits[0]?.levels ?? {};
  const startMicros = onMicros - 5 * MICROS_PER_SECOND;
  return {
    id: `${bridge}-${timeName(onMicros)}`,
    bridge,
    startMicros,
    endMicros: onMicros + 15 * MICROS_PER_SECOND,
    triggerMicros: onMicros,
    cut: null,
    phases: {
      onMicros,
      offMicros: onMicros + 6 * MICROS_PER_SECOND,
      freeEndMicros: onMicros + 12 * MICROS_PER_SECOND,
      foundBy: 'wheel-rail noise',
      quality: 'good',
      notes: [],
    },
    speedMs: maybe(speedMs),
    direction,
    axleCount: maybe(axles),
    axles: [],
    peak: {
      measured: maybe(peak),
      sensor,
      micros: peak === null ? null : onMicros + 7 * MICROS_PER_SECOND,
      limit: peak === null ? null : limit,
      severity: peak === null || limit === null ? null : severityOf(peak, levels),
      ofGravest: peak === null ? null : peak / 3.5,
    },
    rawPeak: maybe(peak),
    f1Hz: measured(5.2, 0.003),
    zeta1: measured(0.013, 0.0004),
    temperatureC: notMeasurable('no thermometer'),
    channels: Object.entries(peaks).map(([id, value]) => aChannel(id, value, wish.flags?.[id] ?? [], onMicros)),
    quality,
    notes: [],
    provenance: {
      definitionVersion: version,
      ruleVersion: 'test',
      filter: { kind: 'Butterworth', order: 4, upToHz: 30, rule: 'EN 1990 A2', phase: 'zero' },
    },
  };
}

/** Wave forms of seeded noise; `A2` has a gap where it is asked for, so two runs. */
export function aWindow(passage: Passage, { rateHz = 500, seconds = 2, gap = true } = {}): WindowChannel[] {
  const random = createRandom(passage.startMicros % 2 ** 31);
  const run = (startMicros: Micros): { startMicros: Micros; samples: Float32Array } => ({
    startMicros,
    samples: Float32Array.from({ length: Math.round(rateHz * seconds) }, () => random.uniform(-3, 3)),
  });
  return passage.channels.map(({ sensor }) => ({
    sensor,
    rateHz,
    runs:
      gap && sensor === 'A2'
        ? [run(passage.startMicros), run(passage.startMicros + (seconds + 1) * MICROS_PER_SECOND)]
        : [run(passage.startMicros)],
  }));
}

/** A level alarm as the desk raises it, with a sentence. */
export function anAlarm(micros: Micros = DAWN, severity: Severity = 'AL', over: Partial<Alarm> = {}): Alarm {
  const sighting = { micros, takenMicros: micros + 200_000, severity, value: 2.5, sensor: 'A1' };
  return { ...raise(over.bridge ?? 'ottermere', 'level', 'ballast', sighting), message: 'a sentence', ...over };
}

function aChannel(sensor: string, peak: number, flags: readonly string[], onMicros: Micros): ChannelMeasures {
  return {
    sensor,
    rateHz: 500,
    offset: measured(0, 0.001),
    noise: measured(0.01, 0.001),
    rawPeak: measured(peak * 1.1, 0.01),
    bandPeak: measured(peak, 0.01),
    bandPeakMicros: onMicros + 7 * MICROS_PER_SECOND,
    rms: measured(peak / 3, 0.01),
    limits: [
      {
        limit: 'ballast',
        upToHz: 45,
        peak: measured(peak, 0.01),
        micros: onMicros + 7 * MICROS_PER_SECOND,
        severity: null,
        timeAboveS: {},
        halfWavesAbove: {},
      },
    ],
    dominantHz: measured(5.2, 0.1),
    flags: [...flags],
  };
}

const maybe = (value: number | null): Measured =>
  value === null ? notMeasurable('not asked for') : measured(value, value / 100);
