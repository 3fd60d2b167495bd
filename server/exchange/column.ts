import type { BridgeDefinition, Sensor } from '#core/contract/bridge.ts';
import { SpanbeatError } from '#core/contract/errors.ts';
import { nearestName } from '#core/contract/nearest-name.ts';
import { unitConversion, unitsOf } from '#core/contract/units.ts';

/** A column's name and the unit written with it: `A1 [g]`, `A1 (g)`. */
export interface ColumnName {
  name: string;
  unit: string | null;
}

/** A column that is a sensor of the bridge. */
interface SensorColumn {
  at: number;
  sensor: Sensor;
  /** Unit of the column's values; null where it holds what the logger sent, in the sensor's own unit and scale. */
  unit: string | null;
}

export interface Columns {
  time: { at: number; name: string; unit: string | null };
  sensors: SensorColumn[];
  /** Names of the columns that are passed over. */
  unknown: string[];
}

/** Words that name a time column. */
const TIME_NAME = /^(time|timestamp|date ?time|date|datum|zeit|t|epoch|utc)([ _.]?(s|ms|us|utc|stamp))?$/i;

/** @example columnName('A1 [m/s²]') // { name: 'A1', unit: 'm/s²' } */
export function columnName(text: string): ColumnName {
  const found = /^(.*?)\s*[[(]([^\])]*)[\])]$/.exec(text.trim());
  if (found === null) return { name: text.trim(), unit: null };
  const unit = (found[2] ?? '').trim();
  return { name: (found[1] ?? '').trim(), unit: unit === '' || unit === '-' ? null : unit };
}

/**
 * Finds the time column and the sensors among the columns of a recording. A sensor is known by its id, or by the
 * name its logger gives it (`loggers.channels`).
 *
 * @param where file and line, for complaints
 * @throws SpanbeatError RECORDING_TIME, RECORDING_NO_CHANNEL, RECORDING_FORMAT, UNIT_UNKNOWN
 */
export function matchColumns(names: readonly ColumnName[], definition: BridgeDefinition, where: string): Columns {
  const sensorOf = sensorNames(definition);
  const timeAt = names.findIndex(({ name }) => TIME_NAME.test(name) && !sensorOf.has(name));
  const time = names[timeAt];
  if (time === undefined) {
    const detail = `found columns ${listed(names)}, expected one called time`;
    throw new SpanbeatError({ code: 'RECORDING_TIME', where, detail });
  }
  const sensors: SensorColumn[] = [];
  const unknown: string[] = [];
  names.forEach(({ name, unit }, at) => {
    if (at === timeAt || name === '') return;
    const sensor = sensorOf.get(name);
    if (sensor === undefined) {
      unknown.push(name);
      return;
    }
    if (sensors.some((other) => other.sensor.id === sensor.id)) {
      throw new SpanbeatError({ code: 'RECORDING_FORMAT', where, detail: `two columns are sensor "${sensor.id}"` });
    }
    checkUnit(sensor, unit, where);
    sensors.push({ at, sensor, unit });
  });
  if (sensors.length === 0) {
    const near = unknown
      .map((name) => nearestName(name, [...sensorOf.keys()]))
      .find((name): name is string => name !== null);
    const hint = near === undefined ? `sensors are ${[...sensorOf.keys()].join(', ')}` : `did you mean ${near}?`;
    throw new SpanbeatError({ code: 'RECORDING_NO_CHANNEL', where, detail: `found ${listed(names)}; ${hint}` });
  }
  const suffix = /[ _.](ms|us|s)$/i.exec(time.name)?.[1] ?? null;
  return { time: { at: timeAt, name: time.name, unit: time.unit ?? suffix }, sensors, unknown };
}

/** @throws SpanbeatError UNIT_UNKNOWN where the unit is not one of the sensor's quantity */
export function checkUnit(sensor: Sensor, unit: string | null, where: string): void {
  if (unit === null || unitConversion(unit, sensor.quantity) !== null) return;
  const detail = `column ${sensor.id}: found "${unit}", expected a unit of ${sensor.quantity}: ${unitsOf(sensor.quantity).join(', ')}`;
  throw new SpanbeatError({ code: 'UNIT_UNKNOWN', where, detail });
}

function sensorNames(definition: BridgeDefinition): Map<string, Sensor> {
  const byId = new Map(definition.sensors.map((sensor) => [sensor.id, sensor]));
  const names = new Map(byId);
  for (const { channels } of definition.loggers) {
    for (const [name, id] of Object.entries(channels ?? {})) {
      const sensor = byId.get(id);
      if (sensor !== undefined && !names.has(name)) names.set(name, sensor);
    }
  }
  return names;
}

function listed(names: readonly ColumnName[]): string {
  const shown = names.slice(0, 12).map(({ name }) => `"${name}"`);
  return shown.join(', ') + (names.length > shown.length ? ` and ${names.length - shown.length} more` : '');
}
