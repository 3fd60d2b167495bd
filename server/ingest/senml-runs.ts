import type { BridgeDefinition, Logger, Sensor } from '#core/contract/bridge.ts';
import type { Complaint, Result } from '#core/contract/errors.ts';
import { MICROS_PER_SECOND, type Micros } from '#core/contract/time.ts';
import { unitConversion } from '#core/contract/units.ts';
import { sensorOfSenmlName } from './sensor-names.ts';
import type { SenmlRecord } from './senml-payload.ts';

/** Evenly spaced values of one sensor. */
export interface Run {
  sensor: string;
  startMicros: Micros;
  rateHz: number;
  samples: Float64Array;
}

interface Values {
  sensor: Sensor;
  micros: Micros[];
  values: number[];
}

/** Below this rate values may come when they like: temperature, slow strain. */
const SLOW_HZ = 10;
/** How far, in sampling periods, a record may lie from its place: loggers round times to milliseconds. */
const SPACING_TOLERANCE = 0.25;
const RATE_TOLERANCE = 0.005;

/**
 * Puts SenML records together to runs at each sensor's rate, in the sensor's unit. A record off the run's spacing
 * begins a new run. A unit that a record names is the unit of the number it sends, and the definition's scale and
 * offset still follow; where none is named the definition's is meant.
 */
export function recordsToRuns(
  definition: BridgeDefinition,
  logger: Logger,
  records: readonly SenmlRecord[],
): { runs: Run[]; complaints: Complaint[] } {
  const complaints: Complaint[] = [];
  const names = new Map<string, Channel | null>();
  const bySensor = new Map<string, Values>();
  for (const { name, ownName, unit, micros, value } of records) {
    const key = `${name} ${ownName} ${unit ?? ''}`;
    let channel = names.get(key);
    if (channel === undefined) {
      const found = channelOf(definition, logger, name, ownName, unit);
      channel = found.ok ? found.value : null;
      if (!found.ok) complaints.push({ ...found.complaint, where: name });
      names.set(key, channel);
    }
    if (channel === null) continue;
    const { sensor, factor, shift } = channel;
    const values = bySensor.get(sensor.id) ?? { sensor, micros: [], values: [] };
    bySensor.set(sensor.id, values);
    values.micros.push(micros);
    values.values.push(value * factor + shift);
  }
  const runs: Run[] = [];
  for (const unsorted of bySensor.values()) {
    const values = inOrder(unsorted);
    const wrong = rateComplaint(values);
    if (wrong === null) runs.push(...split(values));
    else complaints.push(wrong);
  }
  return { runs, complaints };
}

interface Channel {
  sensor: Sensor;
  /** From the record's unit to the sensor's. */
  factor: number;
  shift: number;
}

function channelOf(
  definition: BridgeDefinition,
  logger: Logger,
  name: string,
  ownName: string,
  unit: string | null,
): Result<Channel> {
  const found = sensorOfSenmlName(definition, logger, name, ownName);
  if (!found.ok) return found;
  const sensor = found.value;
  if (unit === null || unit === sensor.unit) return { ok: true, value: { sensor, factor: 1, shift: 0 } };
  const from = unitConversion(unit, sensor.quantity);
  const to = unitConversion(sensor.unit, sensor.quantity);
  if (from === null || to === null) {
    const detail = `${sensor.id} measures ${sensor.quantity} in ${sensor.unit}, the record says ${unit.slice(0, 16)}`;
    return { ok: false, complaint: { code: 'UNIT_UNKNOWN', detail } };
  }
  return { ok: true, value: { sensor, factor: from.factor / to.factor, shift: (from.shift - to.shift) / to.factor } };
}

function inOrder(values: Values): Values {
  if (values.micros.every((micros, i) => i === 0 || micros >= values.micros[i - 1]!)) return values;
  const order = [...values.micros.keys()].sort((a, b) => values.micros[a]! - values.micros[b]!);
  return {
    sensor: values.sensor,
    micros: order.map((i) => values.micros[i]!),
    values: order.map((i) => values.values[i]!),
  };
}

/**
 * The mean spacing, without the gaps, against the definition's. Times rounded to a quarter of a period leave
 * 0.25 / n of doubt, which is granted.
 */
function rateComplaint({ sensor, micros }: Values): Complaint | null {
  if (sensor.rateHz < SLOW_HZ || micros.length < 3) return null;
  const intervals = micros.slice(1).map((time, i) => time - micros[i]!);
  const median = [...intervals].sort((a, b) => a - b)[intervals.length >> 1]!;
  const regular = intervals.filter((interval) => interval <= 1.5 * median);
  const mean = regular.reduce((sum, interval) => sum + interval, 0) / regular.length;
  const off = Math.abs((mean * sensor.rateHz) / MICROS_PER_SECOND - 1);
  if (off <= RATE_TOLERANCE + SPACING_TOLERANCE / regular.length) return null;
  const seen = mean === 0 ? 'at one time' : `at ${(MICROS_PER_SECOND / mean).toPrecision(4)} Hz`;
  return {
    code: 'RATE_WRONG',
    where: sensor.id,
    detail: `${sensor.id} comes ${seen}, defined are ${sensor.rateHz} Hz`,
  };
}

function split({ sensor, micros, values }: Values): Run[] {
  const period = MICROS_PER_SECOND / sensor.rateHz;
  const runs: Run[] = [];
  let first = 0;
  for (let i = 1; i <= micros.length; i += 1) {
    const expected = micros[first]! + (i - first) * period;
    if (i < micros.length && Math.abs(micros[i]! - expected) <= SPACING_TOLERANCE * period) continue;
    const samples = Float64Array.from(values.slice(first, i));
    runs.push({ sensor: sensor.id, startMicros: micros[first]!, rateHz: sensor.rateHz, samples });
    first = i;
  }
  return runs;
}
