import { describe, expect, it } from 'vitest';
import { createHealthRecord, healthView, noteCondition, noteReading, noteSamples } from '../../server/sensor-health.ts';
import { aDefinition, DAWN } from '../support/specimen.ts';

const plain = aDefinition();
const definition: typeof plain = {
  ...plain,
  sensors: [
    ...plain.sensors,
    { id: 'T9', quantity: 'temperature', logger: plain.loggers[0]!.id, mount: 'air', alongM: 0, unit: '°C', rateHz: 1 },
  ],
};
const shaking = plain.sensors[0]!.id;
const SECOND = 1_000_000;

describe('the reading of a thermometer', () => {
  const record = createHealthRecord(definition);
  const reading = (sensor: string): unknown =>
    healthView(record, definition, DAWN).find((one) => one.sensor === sensor)?.reading;
  const come = (sensor: string, second: number, ...values: number[]): void =>
    noteReading(record, {
      bridge: definition.id,
      sensor,
      startMicros: DAWN + second * SECOND,
      rateHz: 1,
      samples: Float32Array.from(values),
    });

  it('is its newest sample with its time, and an older block changes nothing', () => {
    expect(reading('T9')).toBeUndefined();
    come('T9', 0, 3.5, 4, 4.25);
    expect(reading('T9')).toEqual({ micros: DAWN + 2 * SECOND, value: 4.25 });
    come('T9', -60, 9);
    come('T9', 3);
    expect(reading('T9')).toEqual({ micros: DAWN + 2 * SECOND, value: 4.25 });
  });

  it('is not told of a sensor that shakes, whose newest sample says nothing', () => {
    come(shaking, 0, 1, 2);
    expect(reading(shaking)).toBeUndefined();
  });
});

describe('a silent sensor', () => {
  it('is told with the time of its newest sample, in words without an id in them', () => {
    const record = createHealthRecord(definition);
    noteSamples(record, shaking, 500, DAWN, DAWN);
    const [first] = healthView(record, definition, DAWN + 3600 * SECOND).filter(({ sensor }) => sensor === shaking);
    expect(first?.active).toEqual([{ code: 'silent', sinceMicros: DAWN, detail: 'since then no sample has come' }]);
  });
});

it("the newest sample is of the time that the logger's clock gives, also where that went back", () => {
  const record = createHealthRecord(definition);
  const step = { bridge: definition.id, sensor: 'T9', code: 'clock step' as const, detail: 'back' };
  noteSamples(record, 'T9', 1, DAWN, DAWN);
  noteReading(record, {
    bridge: definition.id,
    sensor: 'T9',
    startMicros: DAWN,
    rateHz: 1,
    samples: Float32Array.of(4),
  });
  noteCondition(record, { ...step, state: 'happened', micros: DAWN - 3600 * SECOND });
  expect(record.sensors.get('T9')).toMatchObject({ newestMicros: DAWN, reading: { value: 4 } });
  noteCondition(record, { ...step, state: 'began', micros: DAWN - 3600 * SECOND });
  noteSamples(record, 'T9', 1, DAWN - 3599 * SECOND, DAWN);
  expect(record.sensors.get('T9')?.newestMicros).toBe(DAWN - 3599 * SECOND);
  expect(record.sensors.get('T9')).not.toHaveProperty('reading');
});
