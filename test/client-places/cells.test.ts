import { describe, expect, it } from 'vitest';
import type { BridgeView } from '#core/contract/api.ts';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import type { SensorHealth } from '#core/contract/health.ts';
import { bridgeCells } from '../../client/charts/bridge-cells.ts';
import { bridge, START } from './passage.ts';

const span = bridge.spans[0]!;
const viewOf = (definition: BridgeDefinition): BridgeView =>
  ({ definition, version: 2, versions: [{ version: 2, sinceMicros: START }], sensors: [], bands: [] }) satisfies Omit<
    BridgeView,
    'status'
  > as unknown as BridgeView;

const thermometer = (id: string): BridgeDefinition['sensors'][number] => ({
  id,
  quantity: 'temperature',
  logger: 'L',
  mount: 'air',
  alongM: 1,
  unit: 'degC',
  rateHz: 1,
});
const warm = (sensor: string, value: number, micros: number): SensorHealth =>
  ({ sensor, reading: { value, micros } }) as unknown as SensorHealth;

describe('the title block of a bridge', () => {
  it('says where it lies, what it is made of, since when its definition holds, and what is measured how fast', () => {
    expect(bridgeCells(viewOf(bridge), [], 'UTC')).toEqual([
      ['Bridge', 'Test Bridge, km 10.000'],
      ['Span and track', '20.00 m steel trough, ballasted, 1 track'],
      ['Definition', 'version 2, in force since 21 Sep 2026'],
      ['Logger', 'L, 500 Hz'],
    ]);
  });

  it('counts spans of one length and lists others', () => {
    const two = { ...bridge, spans: [span, { ...span, id: 't', startM: 20 }] };
    expect(bridgeCells(viewOf(two), [], 'UTC')[1]![1]).toBe('2 × 20.00 m steel trough, ballasted, 1 track');
    const unlike = { ...bridge, spans: [span, { ...span, id: 't', startM: 20, lengthM: 12.5 }] };
    expect(bridgeCells(viewOf(unlike), [], 'UTC')[1]![1]).toBe('20.00 + 12.50 m steel trough, ballasted, 1 track');
  });

  it('shows the newest sample of each thermometer with its time, once for those of one second', () => {
    const definition = { ...bridge, sensors: [...bridge.sensors, ...['T1', 'T2', 'T3', 'T4'].map(thermometer)] };
    const health = [warm('T1', 3.24, START), warm('T2', -0.5, START + 400_000), warm('T3', 4, START + 9_000_000)];
    const [label, words] = bridgeCells(viewOf(definition), health, 'UTC').at(-1)!;
    expect(label).toBe('Temperature, newest sample');
    expect(words).toMatch(
      /^T1 3\.2, T2 .0\.5 °C at \d\d:\d\d:\d\d UTC; T3 4\.0 °C at \d\d:\d\d:\d\d UTC; T4 no sample yet$/,
    );
    expect(bridgeCells(viewOf(definition), health, 'UTC')[3]![1]).toBe('L, 500 Hz');
  });
});
