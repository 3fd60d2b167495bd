import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { measured } from '#core/contract/measure.ts';
import type { Passage } from '#core/contract/passage.ts';

/** A small bridge and a plain passage over it, for the tests of pictures. */

export const START = 1_790_000_000_000_000;

export const bridge: BridgeDefinition = {
  spanbeat: 1,
  id: 'b',
  name: 'Test Bridge',
  line: { name: 'Test line', speedKmh: 160 },
  chainageKm: 10,
  timeZone: 'UTC',
  spans: [{ id: 's', startM: 0, lengthM: 20, structure: 'steel trough', track: 'ballasted' }],
  loggers: [{ id: 'L' }],
  sensors: [
    { id: 'A1', quantity: 'acceleration', logger: 'L', mount: 'deck', alongM: 10, unit: 'm/s2', rateHz: 500 },
    {
      id: 'S1',
      quantity: 'strain',
      logger: 'L',
      mount: 'rail',
      alongM: 2,
      unit: 'um/m',
      rateHz: 500,
      countsAxles: true,
    },
    {
      id: 'S2',
      quantity: 'strain',
      logger: 'L',
      mount: 'rail',
      alongM: 18,
      unit: 'um/m',
      rateHz: 500,
      countsAxles: true,
    },
    { id: 'A2', quantity: 'acceleration', logger: 'L', mount: 'deck', alongM: 10.1, unit: 'm/s2', rateHz: 500 },
  ],
  limits: [
    {
      id: 'deck',
      quantity: 'peak deck acceleration',
      levels: { AL: 2.2, IL: 2.8, IAL: 3.5 },
      band: 'EN 1990 A2',
      source: 'test',
    },
  ],
};

interface Wanted {
  offset?: number;
  f1?: number;
  zeta?: number;
  peak?: number;
  speedMs?: number;
  direction?: 'rising' | 'falling';
}

/** On at 2 s, off at 6 s, decay used until 13 s, window of 14 s; two axles 10 m apart. */
export function passageOf({
  offset = 0,
  f1 = 5,
  zeta = 0.01,
  peak = 1,
  speedMs = 20,
  direction = 'rising',
}: Wanted): Passage {
  const on = START + 2_000_000;
  const channel = (sensor: string, bandPeak: number): Passage['channels'][number] => ({
    sensor,
    rateHz: 500,
    offset: measured(offset, null),
    noise: measured(0.006, null),
    rawPeak: measured(bandPeak, 0.01),
    bandPeak: measured(bandPeak, 0.01),
    bandPeakMicros: on + 1_000_000,
    rms: measured(bandPeak / 3, 0.01),
    limits: [],
    dominantHz: measured(f1, 0.05),
    flags: [],
  });
  return {
    id: 'b-20260921-000000-0',
    bridge: 'b',
    startMicros: START,
    endMicros: START + 14_000_000,
    triggerMicros: START + 2_000_000,
    cut: null,
    phases: {
      onMicros: on,
      offMicros: on + 4_000_000,
      freeEndMicros: on + 11_000_000,
      foundBy: 'axle sensors',
      quality: 'good',
      notes: [],
    },
    speedMs: measured(speedMs, 0.05),
    direction,
    axleCount: measured(2, 0),
    // The middle of the axle sensors' base is at 10 m: the first axle is there half a second after 0 m at 20 m/s.
    axles: [
      { micros: on + 500_000, behindFirstM: 0, weight: 1 },
      { micros: on + 1_000_000, behindFirstM: 10, weight: 2 },
    ],
    peak: {
      measured: measured(peak, 0.013),
      sensor: 'A1',
      micros: on + 1_000_000,
      limit: peak > 2.2 ? 'deck' : null,
      severity: peak > 2.8 ? 'IL' : null,
      ofGravest: peak / 3.5,
    },
    rawPeak: measured(peak, 0.01),
    f1Hz: measured(f1, 0.01),
    zeta1: measured(zeta, 0.001),
    temperatureC: measured(10, 0.1),
    channels: [channel('A1', peak), channel('S1', 100), channel('S2', 100), channel('A2', peak * 0.9)],
    quality: 'good',
    notes: [],
    provenance: {
      definitionVersion: 1,
      ruleVersion: '1',
      filter: { kind: 'Butterworth low-pass', order: 4, upToHz: 30, rule: 'EN 1990 A2.4.4.2.1(4)P', phase: 'zero' },
    },
  };
}
