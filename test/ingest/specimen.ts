import type { BridgeDefinition, Logger, Sensor } from '#core/contract/bridge.ts';
import type { Complaint } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND } from '#core/contract/time.ts';
import { buildDirectory, type Directory } from '../../server/ingest/topics.ts';

/** 1 December 2026, 05:00 UTC. */
export const NOW = 1_796_101_200 * MICROS_PER_SECOND;

const sensor = (id: string, more: Partial<Sensor> = {}): Sensor => ({
  id,
  quantity: 'acceleration',
  logger: 'L1',
  mount: 'deck',
  alongM: 5,
  unit: 'm/s2',
  rateHz: 500,
  ...more,
});

/** A bridge with a logger that keeps to the contract, one with a topic of its own, and one with a wild topic. */
export const BRIDGE: BridgeDefinition = {
  spanbeat: 1,
  id: 'specimen',
  name: 'Specimen',
  line: { name: 'Test line' },
  chainageKm: 1,
  spans: [{ id: 'main', startM: 0, lengthM: 10, structure: 'steel trough', track: 'ballasted' }],
  loggers: [
    { id: 'L1' },
    { id: 'L2', topic: 'site/7/raw', payload: 'senml', channels: { 'dev:acc_x': 'B1' } },
    { id: 'L3', topic: 'plant/+/blocks', channels: { ch0: 'C1', ch1: 'C2' } } satisfies Logger,
  ],
  sensors: [
    sensor('A1'),
    sensor('A2', { unit: 'mg' }),
    sensor('T1', { quantity: 'temperature', unit: 'Cel', rateHz: 1, mount: 'air' }),
    sensor('S1', { quantity: 'strain', unit: 'um/m', rateHz: 100 }),
    sensor('B1', { logger: 'L2', rateHz: 100 }),
    sensor('C1', { logger: 'L3' }),
    sensor('C2', { logger: 'L3' }),
  ],
  limits: [],
};

export function directoryOf(definition: BridgeDefinition = BRIDGE): Directory {
  return buildDirectory([definition]).directory;
}

export const codes = (complaints: readonly Complaint[]): string[] => complaints.map(({ code }) => code);

export const hex = (text: string): Uint8Array => Uint8Array.from(Buffer.from(text.replace(/\s+/g, ''), 'hex'));
