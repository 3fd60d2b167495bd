import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';

/** A bridge of one 20 m span with four deck accelerometers and a rail gauge at each bearing; parts can be replaced. */
export function plainBridge(change: Partial<BridgeDefinition> = {}): BridgeDefinition {
  return {
    spanbeat: 1,
    id: 'plain',
    name: 'Plain Bridge',
    line: { name: 'Test line', speedKmh: 160 },
    chainageKm: 10,
    spans: [
      {
        id: '1',
        startM: 0,
        lengthM: 20,
        structure: 'steel trough',
        track: 'ballasted',
        frequenciesHz: { f1: 5 },
        dampingPercent: 1.5,
      },
    ],
    loggers: [{ id: 'L1' }],
    sensors: [deckSensor('A1', 5), deckSensor('A2', 10), deckSensor('A3', 15), gauge('S1', 0), gauge('S2', 20)],
    limits: [
      {
        id: 'deck',
        quantity: 'peak deck acceleration',
        levels: { AL: 2.2, IL: 2.8, IAL: 3.5 },
        band: 'EN 1990 A2',
        source: 'EN 1990 A2.4.4.2.1(4)P',
      },
    ],
    ...change,
  };
}

export function deckSensor(id: string, alongM: number, change: Partial<Sensor> = {}): Sensor {
  return { id, quantity: 'acceleration', logger: 'L1', mount: 'deck', alongM, unit: 'm/s2', rateHz: 500, ...change };
}

export function gauge(id: string, alongM: number, change: Partial<Sensor> = {}): Sensor {
  return {
    id,
    quantity: 'strain',
    logger: 'L1',
    mount: 'rail',
    alongM,
    unit: 'um/m',
    rateHz: 500,
    countsAxles: true,
    ...change,
  };
}
