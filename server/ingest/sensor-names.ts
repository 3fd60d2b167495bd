import type { BridgeDefinition, Logger, Sensor } from '#core/contract/bridge.ts';
import { accept, refuse, type Result } from '#core/contract/errors.ts';

/**
 * The sensor that a logger means by a name in its payload: by the logger's own map of channels, else by its id.
 */
export function sensorNamed(definition: BridgeDefinition, logger: Logger, name: string): Result<Sensor> {
  const { channels } = logger;
  const id = channels !== undefined && Object.hasOwn(channels, name) ? channels[name]! : name;
  const sensor = definition.sensors.find((one) => one.id === id);
  if (sensor === undefined) return refuse('SENSOR_UNKNOWN', `${definition.id} has no sensor ${quoted(name)}`);
  if (sensor.logger !== logger.id) {
    return refuse('SENSOR_UNKNOWN', `sensor ${id} belongs to logger ${sensor.logger}, not to ${logger.id}`);
  }
  return accept(sensor);
}

/**
 * The sensor that a SenML name means. SenML names are global (RFC 8428 section 4.5.1), so the sensor's own name is
 * mostly their end: `urn:dev:mac:0024befffe804ff1:A1`, `ottermere/OT-1/A1`. Taken are, in this order: the whole name,
 * the record's own name without the base name, and the longest end of the whole name that follows a separator.
 */
export function sensorOfSenmlName(
  definition: BridgeDefinition,
  logger: Logger,
  name: string,
  ownName: string,
): Result<Sensor> {
  const whole = sensorNamed(definition, logger, name);
  if (whole.ok) return whole;
  for (const candidate of [ownName, ...endings(name)]) {
    const sensor = sensorNamed(definition, logger, candidate);
    if (sensor.ok) return sensor;
  }
  return whole;
}

/** Ends of a name after each separator of the SenML alphabet, longest first. */
function* endings(name: string): Generator<string> {
  for (let i = 0; i < name.length - 1; i += 1) {
    if (':/_.-'.includes(name[i]!)) yield name.slice(i + 1);
  }
}

const quoted = (name: string): string => JSON.stringify(name.slice(0, 64));
