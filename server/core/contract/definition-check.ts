import type { TSchema } from 'typebox';
import { Settings } from 'typebox/system';
import { Value } from 'typebox/value';
import { BridgeDefinition, bridgeLengthM, countsAxles, isDeckAcceleration, spanAt } from './bridge.ts';
import type { Limit, Sensor, Span } from './bridge.ts';
import type { ErrorCode } from './errors.ts';
import { nearestName } from './nearest-name.ts';
import { describeSchema, schemaAt, showFound } from './schema-words.ts';
import { SEVERITIES } from './severity.ts';
import { unitConversion, unitsOf } from './units.ts';

/** Steps from the root of a definition to a field. */
export type FieldPath = readonly (string | number)[];

interface DefinitionProblem {
  code: ErrorCode;
  path: FieldPath;
  /** What was found, what was expected; without the path. */
  detail: string;
  /** True where the problem is a name, not its value: an unknown field. */
  atName?: boolean;
}

export type DefinitionVerdict =
  { ok: true; definition: BridgeDefinition } | { ok: false; problems: DefinitionProblem[] };

/** Problems listed of one definition; a file worse than that is to be corrected from the top anyway. */
const LIMIT_PROBLEMS = 50;

/** A sensor may stand this far outside the bridge, m: on the approach, for axles. */
const BEYOND_BRIDGE_M = 50;

/** Slowest rate for all that is vibration; temperatures may be slower. */
const SLOWEST_DYNAMIC_HZ = 20;

/** Highest part of the sampling rate that a band edge may need: leaves a tenth of it for anti-aliasing. */
const USABLE_PART_OF_RATE = 0.45;

/**
 * Judges a parsed bridge definition: its shape by the schema, and, where that is sound, what no schema can say
 * (references, units, order of limits, places, rates).
 *
 * @param data what the YAML or JSON text held
 * @param knownTimeZone whether an IANA time-zone name is known on this machine
 * @returns the definition, or up to fifty problems in the order of the file's fields
 * @example checkDefinition({}, () => true) // { ok: false, problems: [… 'chainageKm' is missing …] }
 */
export function checkDefinition(data: unknown, knownTimeZone: (name: string) => boolean): DefinitionVerdict {
  const shape = shapeProblems(data);
  if (shape.length > 0) return { ok: false, problems: shape.slice(0, LIMIT_PROBLEMS) };
  const definition = data as BridgeDefinition;
  const problems = [
    ...duplicateIds(definition),
    ...danglingReferences(definition),
    ...timeZoneProblems(definition, knownTimeZone),
    ...spanProblems(definition),
    ...loggerProblems(definition),
    ...definition.sensors.flatMap((sensor, at) => sensorProblems(definition, sensor, at)),
    ...definition.limits.flatMap(levelProblems),
    ...bandProblems(definition),
  ];
  return problems.length === 0 ? { ok: true, definition } : { ok: false, problems: problems.slice(0, LIMIT_PROBLEMS) };
}

/** `sensors[2].rateHz`; the root is called so. */
export function fieldName(path: FieldPath): string {
  if (path.length === 0) return 'the definition';
  return path.map((step, at) => (typeof step === 'number' ? `[${step}]` : at === 0 ? step : `.${step}`)).join('');
}

// the schema

function shapeProblems(data: unknown): DefinitionProblem[] {
  const found = new Map<string, DefinitionProblem>();
  const note = (problem: DefinitionProblem): void => {
    const key = JSON.stringify(problem.path);
    if (!found.has(key)) found.set(key, problem);
  };
  for (const error of schemaErrors(data)) {
    // The parts of a choice are told by the choice itself; `boolean` doubles `additionalProperties`.
    if (error.keyword === 'boolean' || error.schemaPath.includes('/anyOf/')) continue;
    const path = pointerSteps(error.instancePath, data);
    const schema = schemaAt(BridgeDefinition, error.schemaPath);
    if (error.keyword === 'additionalProperties') {
      for (const name of error.params.additionalProperties) note(unknownField([...path, name], schema));
    } else if (error.keyword === 'required') {
      for (const name of error.params.requiredProperties) note(missingField([...path, name], schema));
    } else {
      const detail = `found ${showFound(valueAt(data, path))}, expected ${describeSchema(schema)}`;
      note({ code: 'DEFINITION_INVALID', path, detail });
    }
  }
  return [...found.values()];
}

/** All errors, where typebox by itself stops at eight. */
function schemaErrors(data: unknown): ReturnType<typeof Value.Errors> {
  const before = Settings.Get().maxErrors;
  Settings.Set({ maxErrors: 4 * LIMIT_PROBLEMS });
  try {
    return Value.Errors(BridgeDefinition, data);
  } finally {
    Settings.Set({ maxErrors: before });
  }
}

function unknownField(path: FieldPath, schema: unknown): DefinitionProblem {
  const names = Object.keys(propertiesOf(schema));
  const near = nearestName(String(path.at(-1)), names);
  const hint = near === null ? `known here are ${names.join(', ')}` : `did you mean ${near}?`;
  return { code: 'DEFINITION_INVALID', path, detail: `unknown field; ${hint}`, atName: true };
}

function missingField(path: FieldPath, schema: unknown): DefinitionProblem {
  const expected = describeSchema(propertiesOf(schema)[String(path.at(-1))]);
  return { code: 'DEFINITION_INVALID', path, detail: `found nothing, expected ${expected}` };
}

function propertiesOf(schema: unknown): Record<string, TSchema> {
  const properties = (schema as { properties?: Record<string, TSchema> } | undefined)?.properties;
  return properties ?? {};
}

/** Steps of a JSON pointer (RFC 6901); numbers where the data hold a list. */
function pointerSteps(pointer: string, data: unknown): (string | number)[] {
  const steps: (string | number)[] = [];
  for (const raw of pointer.split('/').slice(1)) {
    const step = raw.replaceAll('~1', '/').replaceAll('~0', '~');
    steps.push(Array.isArray(valueAt(data, steps)) ? Number(step) : step);
  }
  return steps;
}

function valueAt(data: unknown, path: FieldPath): unknown {
  return path.reduce<unknown>(
    (value, step) =>
      typeof value === 'object' && value !== null && Object.hasOwn(value, step)
        ? (value as Record<string | number, unknown>)[step]
        : undefined,
    data,
  );
}

// what no schema can say

function duplicateIds(definition: BridgeDefinition): DefinitionProblem[] {
  const lists = ['spans', 'loggers', 'sensors', 'limits'] as const;
  return lists.flatMap((list) => {
    const first = new Map<string, number>();
    return definition[list].flatMap(({ id }, at) => {
      const before = first.get(id);
      if (before === undefined) {
        first.set(id, at);
        return [];
      }
      const detail = `"${id}" is also the id of ${list}[${before}]`;
      return [{ code: 'DEFINITION_DUPLICATE_ID' as const, path: [list, at, 'id'], detail }];
    });
  });
}

function danglingReferences(definition: BridgeDefinition): DefinitionProblem[] {
  const loggers = new Set(definition.loggers.map(({ id }) => id));
  const sensors = new Map(definition.sensors.map((sensor) => [sensor.id, sensor]));
  const spans = new Set(definition.spans.map(({ id }) => id));
  const problems: DefinitionProblem[] = [];
  const dangling = (path: FieldPath, id: string, kind: string, known: Iterable<string>): void => {
    const names = [...known];
    const near = nearestName(id, names);
    const hint = near === null ? `defined are ${names.join(', ')}` : `did you mean ${near}?`;
    problems.push({ code: 'DEFINITION_REFERENCE', path, detail: `no ${kind} "${id}"; ${hint}` });
  };
  definition.loggers.forEach((logger, at) => {
    for (const [name, id] of Object.entries(logger.channels ?? {})) {
      const path = ['loggers', at, 'channels', name];
      const sensor = sensors.get(id);
      if (sensor === undefined) dangling(path, id, 'sensor', sensors.keys());
      else if (sensor.logger !== logger.id) {
        const detail = `sensor "${id}" belongs to logger "${sensor.logger}", expected one of "${logger.id}"`;
        problems.push({ code: 'DEFINITION_REFERENCE', path, detail });
      }
    }
  });
  definition.sensors.forEach(({ logger }, at) => {
    if (!loggers.has(logger)) dangling(['sensors', at, 'logger'], logger, 'logger', loggers);
  });
  definition.limits.forEach((limit, at) => {
    limit.spans?.forEach((id, index) => {
      if (!spans.has(id)) dangling(['limits', at, 'spans', index], id, 'span', spans);
    });
  });
  return problems;
}

function timeZoneProblems(
  { timeZone }: BridgeDefinition,
  knownTimeZone: (name: string) => boolean,
): DefinitionProblem[] {
  if (timeZone === undefined || knownTimeZone(timeZone)) return [];
  return [invalid(['timeZone'], `found "${timeZone}", expected an IANA name such as Europe/Berlin or Etc/GMT-1`)];
}

function spanProblems({ spans }: BridgeDefinition): DefinitionProblem[] {
  const sorted = spans.map((span, at) => ({ span, at })).sort((a, b) => a.span.startM - b.span.startM);
  return sorted.flatMap(({ span, at }, index) => {
    const before = sorted[index - 1]?.span;
    // A millimetre of play: lengths are written rounded.
    if (before === undefined || span.startM >= before.startM + before.lengthM - 1e-3) return [];
    const end = round(before.startM + before.lengthM);
    const detail = `found ${span.startM}, expected ${end} or more: span "${before.id}" reaches to ${end} m`;
    return [invalid(['spans', at, 'startM'], detail)];
  });
}

function loggerProblems({ loggers }: BridgeDefinition): DefinitionProblem[] {
  return loggers.flatMap((logger, at) => {
    const problems: DefinitionProblem[] = [];
    const named = new Map<string, string>();
    for (const [name, id] of Object.entries(logger.channels ?? {})) {
      const before = named.get(id);
      if (before === undefined) named.set(id, name);
      else {
        const detail = `sensor "${id}" is already fed by "${before}"`;
        problems.push({ code: 'DEFINITION_DUPLICATE_ID', path: ['loggers', at, 'channels', name], detail });
      }
    }
    if (logger.topic !== undefined && !isTopicFilter(logger.topic)) {
      const detail = `found "${logger.topic}", expected an MQTT topic; + stands for one level, # for the rest`;
      problems.push(invalid(['loggers', at, 'topic'], detail));
    }
    return problems;
  });
}

/** MQTT 5.0, 4.7.1: a wildcard fills its level, `#` is the last level. */
function isTopicFilter(topic: string): boolean {
  const levels = topic.split('/');
  return (
    !topic.includes('\0') &&
    levels.every((level, at) => level === '+' || (level === '#' && at === levels.length - 1) || !/[+#]/.test(level))
  );
}

function sensorProblems(definition: BridgeDefinition, sensor: Sensor, at: number): DefinitionProblem[] {
  const problems: DefinitionProblem[] = [];
  const complain = (field: string, detail: string): void => void problems.push(invalid(['sensors', at, field], detail));
  if (unitConversion(sensor.unit, sensor.quantity) === null) {
    const units = unitsOf(sensor.quantity).join(', ');
    const detail = `found "${sensor.unit}", expected a unit of ${sensor.quantity}: ${units}`;
    problems.push({ code: 'UNIT_UNKNOWN', path: ['sensors', at, 'unit'], detail });
  }
  if (sensor.scale === 0) complain('scale', 'found 0, expected another number: all values would be the offset');
  const [low, high] = sensor.range ?? [];
  if (low !== undefined && high !== undefined && low >= high) {
    complain('range', `found ${low} to ${high}, expected the lower end first`);
  }
  if (sensor.quantity !== 'temperature' && sensor.rateHz < SLOWEST_DYNAMIC_HZ) {
    complain('rateHz', `found ${sensor.rateHz}, expected ${SLOWEST_DYNAMIC_HZ} to 20000 Hz for ${sensor.quantity}`);
  }
  const [from, to] = [-BEYOND_BRIDGE_M, round(bridgeLengthM(definition) + BEYOND_BRIDGE_M)];
  if (sensor.alongM < from || sensor.alongM > to) {
    complain('alongM', `found ${sensor.alongM}, expected ${from} to ${to} m, on the bridge or just before it`);
  }
  if (sensor.quantity === 'temperature' && countsAxles(sensor)) {
    complain('countsAxles', 'found true, expected a sensor that can feel an axle, not a temperature');
  }
  return problems;
}

function levelProblems({ levels }: Limit, at: number): DefinitionProblem[] {
  const set = SEVERITIES.flatMap((severity) => {
    const value = levels[severity];
    return value === undefined ? [] : [{ severity, value }];
  });
  return set.flatMap(({ severity, value }, index) => {
    const below = set[index - 1];
    if (below === undefined || below.value < value) return [];
    const detail = `found ${value}, expected more than ${below.severity} (${below.value}): AL < IL < IAL`;
    return [invalid(['limits', at, 'levels', severity], detail)];
  });
}

/** A band that a sensor's rate cannot carry makes a peak that is low without a sign. */
function bandProblems(definition: BridgeDefinition): DefinitionProblem[] {
  return definition.sensors.flatMap((sensor, at) => {
    if (!isDeckAcceleration(sensor)) return [];
    const span = spanAt(definition, sensor.alongM);
    const worst = definition.limits
      .filter((limit) => limit.spans === undefined || limit.spans.includes(span.id))
      .map((limit) => ({ limit, edgeHz: leastBandEdgeHz(limit, span) }))
      .sort((a, b) => b.edgeHz - a.edgeHz)[0];
    if (worst === undefined || worst.edgeHz <= USABLE_PART_OF_RATE * sensor.rateHz) return [];
    const needed = Math.ceil(worst.edgeHz / USABLE_PART_OF_RATE);
    const detail =
      `found ${sensor.rateHz}, expected ${needed} or more: limit "${worst.limit.id}" needs frequencies up to ` +
      `${round(worst.edgeHz)} Hz, and ${USABLE_PART_OF_RATE} of the rate is usable`;
    return [invalid(['sensors', at, 'rateHz'], detail)];
  });
}

/** EN 1990 A2.4.4.2.1(4)P: the greater of 30 Hz, 1.5 f1 and f3, as far as the definition knows them. */
function leastBandEdgeHz({ band }: Limit, { frequenciesHz }: Span): number {
  if (band !== 'EN 1990 A2') return band.upToHz;
  return Math.max(30, 1.5 * (frequenciesHz?.f1 ?? 0), frequenciesHz?.f3 ?? 0);
}

const invalid = (path: FieldPath, detail: string): DefinitionProblem => ({ code: 'DEFINITION_INVALID', path, detail });

const round = (value: number): number => Math.round(value * 1000) / 1000;
