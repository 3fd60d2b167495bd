import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';
import type { SensorCondition, SensorHealth } from '#core/contract/health.ts';
import type { LiveSamples, SensorVitals } from '#core/contract/pipeline.ts';
import { MICROS_PER_SECOND, sampleMicros, type Micros } from '#core/contract/time.ts';
import { DEFAULT_SILENT_AFTER_S } from '#core/alarm/silence.ts';

/** What is known of the health of a bridge's sensors, gathered from what the pipeline says and from when each was heard. */
export interface HealthRecord {
  /** By sensor of the definition. */
  sensors: Map<string, SensorHealth>;
  /** Wall clock when each sensor was last heard; absent before. */
  heardMicros: Map<string, Micros>;
  /** Thermometers, whose readings are kept. */
  thermometers: ReadonlySet<string>;
}

/**
 * @param known from a snapshot; sensors that the definition no longer has are dropped
 * @param heardMicros from the same run of the server
 */
export function createHealthRecord(
  definition: BridgeDefinition,
  known: readonly SensorHealth[] = [],
  heardMicros: Map<string, Micros> = new Map<string, Micros>(),
): HealthRecord {
  const before = new Map(known.map((health) => [health.sensor, health]));
  return {
    sensors: new Map(definition.sensors.map(({ id }) => [id, before.get(id) ?? fresh(id)])),
    heardMicros,
    thermometers: new Set(definition.sensors.flatMap(({ id, quantity }) => (quantity === 'temperature' ? [id] : []))),
  };
}

const fresh = (sensor: string): SensorHealth => ({
  sensor,
  newestMicros: null,
  samples: 0,
  active: [],
  counts: {},
  noise: null,
  offset: null,
});

export function noteSamples(record: HealthRecord, sensor: string, count: number, newest: Micros, heard: Micros): void {
  const health = record.sensors.get(sensor);
  if (health === undefined) return;
  health.samples += count;
  health.newestMicros = Math.max(health.newestMicros ?? 0, newest);
  record.heardMicros.set(sensor, Math.max(record.heardMicros.get(sensor) ?? 0, heard));
}

/** Calibrated samples came; of a thermometer the newest is kept. Older ones, as of a replay, change nothing. */
export function noteReading(record: HealthRecord, { sensor, startMicros, rateHz, samples }: LiveSamples): void {
  if (!record.thermometers.has(sensor)) return;
  const health = record.sensors.get(sensor);
  const value = samples.at(-1);
  if (health === undefined || value === undefined || Number.isNaN(value)) return;
  const micros = sampleMicros(startMicros, samples.length - 1, rateHz);
  if (micros >= (health.reading?.micros ?? 0)) health.reading = { micros, value };
}

export function noteVitals(record: HealthRecord, { sensor, noise, offset }: SensorVitals): void {
  const health = record.sensors.get(sensor);
  if (health === undefined) return;
  health.noise = noise;
  health.offset = offset;
}

export function noteCondition(record: HealthRecord, { sensor, code, state, micros, detail }: SensorCondition): void {
  const health = record.sensors.get(sensor);
  if (health === undefined) return;
  if (state !== 'ended') health.counts[code] = (health.counts[code] ?? 0) + 1;
  if (state === 'happened') return;
  // The logger's clock went back: what comes now is the newest.
  if (code === 'clock step' && state === 'began') {
    health.newestMicros = micros;
    delete health.reading;
  }
  const others = health.active.filter((condition) => condition.code !== code);
  health.active = state === 'began' ? [...others, { code, sinceMicros: micros, detail }] : others;
}

/** Whether a sensor gives data now. Slow sensors are given three of their samples. */
export function isAlive(
  record: HealthRecord,
  definition: BridgeDefinition,
  sensor: Sensor,
  nowMicros: Micros,
): boolean {
  const heard = record.heardMicros.get(sensor.id);
  return heard !== undefined && nowMicros - heard <= silentAfterMicros(definition, sensor);
}

/**
 * What there is to say of a sensor's silence: that it began, or that it is over; null where nothing can be said, since it
 * was never heard, or has not been waited for long enough.
 *
 * @param awaitedMicros wall clock from when on it could have been heard: the server came up, or its logger came back
 */
export function silenceOfSensor(
  record: HealthRecord,
  definition: BridgeDefinition,
  sensor: Sensor,
  awaitedMicros: Micros,
  nowMicros: Micros,
): SensorCondition | null {
  const newest = record.sensors.get(sensor.id)?.newestMicros ?? null;
  if (newest === null) return null;
  const after = silentAfterMicros(definition, sensor);
  const told = { bridge: definition.id, sensor: sensor.id, code: 'silent' as const };
  if (isAlive(record, definition, sensor, nowMicros)) {
    return { ...told, state: 'ended', micros: newest, detail: 'its samples come again' };
  }
  const heard = Math.max(awaitedMicros, record.heardMicros.get(sensor.id) ?? 0);
  if (nowMicros - heard <= after) return null;
  const detail = `no sample for more than ${after / MICROS_PER_SECOND} s, though its logger sends`;
  return { ...told, state: 'began', micros: newest + after, detail };
}

/** As the Bridges place shows it: silence is judged by the wall clock, so it is added when it is looked at. */
export function healthView(record: HealthRecord, definition: BridgeDefinition, nowMicros: Micros): SensorHealth[] {
  return definition.sensors.map((sensor) => {
    const health = record.sensors.get(sensor.id)!;
    if (health.newestMicros === null || isAlive(record, definition, sensor, nowMicros)) {
      return { ...health, active: [...health.active], counts: { ...health.counts } };
    }
    const since = health.newestMicros;
    const silent = { code: 'silent' as const, sinceMicros: since, detail: 'since then no sample has come' };
    return { ...health, active: [silent, ...health.active], counts: { ...health.counts } };
  });
}

function silentAfterMicros({ loggers }: BridgeDefinition, { logger, rateHz }: Sensor): Micros {
  const defined = loggers.find(({ id }) => id === logger)?.silentAfterS ?? DEFAULT_SILENT_AFTER_S;
  return Math.max(defined, 3 / rateHz) * MICROS_PER_SECOND;
}
