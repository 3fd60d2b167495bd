import { bridgeLengthM, countsAxles, isDeckAcceleration, spanAt } from './bridge.ts';
import type { Limit, Logger, Sensor, Span, SpanPlace } from './bridge.ts';
import type { ErrorCode } from './errors.ts';
import { nearestName } from './nearest-name.ts';
import { SEVERITIES } from './severity.ts';
import type { FieldPath, ShapeProblem } from './shape.ts';
import { unitConversion, unitsOf } from './units.ts';

export interface DefinitionProblem extends ShapeProblem {
  code: ErrorCode;
}

/** An entry of a list of the definition, with those fields of it that are sound by the schema. */
export interface SoundItem<T> {
  /** Its place in the list. */
  at: number;
  item: Partial<T>;
  /** Fields that are absent because they are missing or not sound, not because they were left out. */
  lacks: ReadonlySet<string>;
}

/** What of a definition is sound by the schema. */
export interface SoundParts {
  timeZone: string | null;
  spans: readonly SoundItem<Span>[];
  loggers: readonly SoundItem<Logger>[];
  sensors: readonly SoundItem<Sensor>[];
  limits: readonly SoundItem<Limit>[];
}

/** A sensor may stand this far outside the bridge, m: on the approach, for axles. */
const BEYOND_BRIDGE_M = 50;

/** Slowest rate for all that is vibration; temperatures may be slower. */
const SLOWEST_DYNAMIC_HZ = 20;

/** Highest part of the sampling rate that a band edge may need: leaves a tenth of it for anti-aliasing. */
const USABLE_PART_OF_RATE = 0.45;

/**
 * What no schema can say of a definition: references, units, order of limits, places, rates. Each is judged as soon as
 * the fields it depends on are sound.
 *
 * @param parts the fields that are sound
 * @param knownTimeZone whether an IANA time-zone name is known on this machine
 */
export function inconsistencies(parts: SoundParts, knownTimeZone: (name: string) => boolean): DefinitionProblem[] {
  const spans = placedSpans(parts);
  return [
    ...duplicateIds(parts),
    ...danglingReferences(parts),
    ...timeZoneProblems(parts, knownTimeZone),
    ...spanProblems(parts),
    ...parts.loggers.flatMap(loggerProblems),
    ...parts.sensors.flatMap(sensorProblems),
    ...(spans === null ? [] : parts.sensors.flatMap((sensor) => placeProblems(sensor, spans))),
    ...parts.limits.flatMap(levelProblems),
    ...(spans === null ? [] : parts.sensors.flatMap((sensor) => bandProblems(sensor, spans, parts.limits))),
  ];
}

function duplicateIds(parts: SoundParts): DefinitionProblem[] {
  const lists = ['spans', 'loggers', 'sensors', 'limits'] as const;
  return lists.flatMap((list) => {
    const first = new Map<string, number>();
    return parts[list].flatMap(({ at, item: { id } }) => {
      if (id === undefined) return [];
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

function danglingReferences({ spans, loggers, sensors, limits }: SoundParts): DefinitionProblem[] {
  const problems: DefinitionProblem[] = [];
  const look = (path: FieldPath, id: string | undefined, kind: string, known: ReadonlySet<string> | null): void => {
    if (id === undefined || known === null || known.has(id)) return;
    const names = [...known];
    const near = nearestName(id, names);
    const hint = near === null ? `defined are ${names.join(', ')}` : `did you mean ${near}?`;
    problems.push({ code: 'DEFINITION_REFERENCE', path, detail: `no ${kind} "${id}"; ${hint}` });
  };
  const known = { spans: idsOf(spans), loggers: idsOf(loggers), sensors: idsOf(sensors) };
  const loggerOf = new Map(sensors.map(({ item }) => [item.id, item.logger]));
  for (const { at, item: logger } of loggers) {
    for (const [name, id] of Object.entries(logger.channels ?? {})) {
      const path = ['loggers', at, 'channels', name];
      look(path, id, 'sensor', known.sensors);
      const owner = loggerOf.get(id);
      if (owner === undefined || logger.id === undefined || owner === logger.id) continue;
      const detail = `sensor "${id}" belongs to logger "${owner}", expected one of "${logger.id}"`;
      problems.push({ code: 'DEFINITION_REFERENCE', path, detail });
    }
  }
  for (const { at, item } of sensors) look(['sensors', at, 'logger'], item.logger, 'logger', known.loggers);
  for (const { at, item } of limits) {
    item.spans?.forEach((id, index) => look(['limits', at, 'spans', index], id, 'span', known.spans));
  }
  return problems;
}

/** Null where not all are known: then nobody can say of an id that there is no such thing. */
function idsOf(items: readonly SoundItem<{ id: string }>[]): ReadonlySet<string> | null {
  const ids = items.flatMap(({ item: { id } }) => id ?? []);
  return ids.length === items.length && ids.length > 0 ? new Set(ids) : null;
}

function timeZoneProblems({ timeZone }: SoundParts, knownTimeZone: (name: string) => boolean): DefinitionProblem[] {
  if (timeZone === null || knownTimeZone(timeZone)) return [];
  return [invalid(['timeZone'], `found "${timeZone}", expected an IANA name such as Europe/Berlin or Etc/GMT-1`)];
}

type PlacedSpan = Partial<Span> & SpanPlace;

/** Null where not all places are known. */
function placedSpans({ spans }: SoundParts): readonly PlacedSpan[] | null {
  const placed = spans.map(({ item }) => item).filter(isPlaced);
  return placed.length === spans.length && placed.length > 0 ? placed : null;
}

const isPlaced = (span: Partial<Span>): span is PlacedSpan => span.startM !== undefined && span.lengthM !== undefined;

function spanProblems({ spans }: SoundParts): DefinitionProblem[] {
  const sorted = spans
    .flatMap(({ at, item }) => (isPlaced(item) ? [{ span: item, at }] : []))
    .sort((a, b) => a.span.startM - b.span.startM);
  return sorted.flatMap(({ span, at }, index) => {
    const before = sorted[index - 1];
    if (before === undefined) return [];
    const end = round(before.span.startM + before.span.lengthM);
    // A millimetre of play: lengths are written rounded.
    if (span.startM >= before.span.startM + before.span.lengthM - 1e-3) return [];
    const name = before.span.id === undefined ? `spans[${before.at}]` : `span "${before.span.id}"`;
    return [
      invalid(['spans', at, 'startM'], `found ${span.startM}, expected ${end} or more: ${name} reaches to ${end} m`),
    ];
  });
}

function loggerProblems({ at, item: logger }: SoundItem<Logger>): DefinitionProblem[] {
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
}

/** MQTT 5.0, 4.7.1: a wildcard fills its level, `#` is the last level. */
function isTopicFilter(topic: string): boolean {
  const levels = topic.split('/');
  return (
    !topic.includes('\0') &&
    levels.every((level, at) => level === '+' || (level === '#' && at === levels.length - 1) || !/[+#]/.test(level))
  );
}

function sensorProblems({ at, item: sensor }: SoundItem<Sensor>): DefinitionProblem[] {
  const problems: DefinitionProblem[] = [];
  const complain = (field: string, detail: string): void => void problems.push(invalid(['sensors', at, field], detail));
  const { quantity, unit, rateHz } = sensor;
  if (quantity !== undefined && unit !== undefined && unitConversion(unit, quantity) === null) {
    const detail = `found "${unit}", expected a unit of ${quantity}: ${unitsOf(quantity).join(', ')}`;
    problems.push({ code: 'UNIT_UNKNOWN', path: ['sensors', at, 'unit'], detail });
  }
  if (sensor.scale === 0) complain('scale', 'found 0, expected another number: all values would be the offset');
  const [low, high] = sensor.range ?? [];
  if (low !== undefined && high !== undefined && low >= high) {
    complain('range', `found ${low} to ${high}, expected the lower end first`);
  }
  const isDynamic = quantity !== undefined && quantity !== 'temperature';
  if (isDynamic && rateHz !== undefined && rateHz < SLOWEST_DYNAMIC_HZ) {
    complain('rateHz', `found ${rateHz}, expected ${SLOWEST_DYNAMIC_HZ} to 20000 Hz for ${quantity}`);
  }
  if (quantity === 'temperature' && countsAxles(sensor)) {
    complain('countsAxles', 'found true, expected a sensor that can feel an axle, not a temperature');
  }
  return problems;
}

function placeProblems({ at, item: { alongM } }: SoundItem<Sensor>, spans: readonly PlacedSpan[]): DefinitionProblem[] {
  const [from, to] = [-BEYOND_BRIDGE_M, round(bridgeLengthM({ spans }) + BEYOND_BRIDGE_M)];
  if (alongM === undefined || (alongM >= from && alongM <= to)) return [];
  const detail = `found ${alongM}, expected ${from} to ${to} m, on the bridge or just before it`;
  return [invalid(['sensors', at, 'alongM'], detail)];
}

function levelProblems({ at, item: { levels } }: SoundItem<Limit>): DefinitionProblem[] {
  const set = SEVERITIES.flatMap((severity) => {
    const value = levels?.[severity];
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
function bandProblems(
  { at, item: sensor, lacks }: SoundItem<Sensor>,
  spans: readonly PlacedSpan[],
  limits: readonly SoundItem<Limit>[],
): DefinitionProblem[] {
  const { alongM, rateHz } = sensor;
  if (alongM === undefined || rateHz === undefined || lacks.has('direction') || !isDeckAcceleration(sensor)) return [];
  const span = spanAt({ spans }, alongM);
  const worst = limits
    .filter(({ item, lacks: unknown }) => !unknown.has('spans') && holdsFor(item, span))
    .map(({ at: place, item }) => ({ name: item.id ?? `limits[${place}]`, edgeHz: leastBandEdgeHz(item, span) }))
    .sort((a, b) => b.edgeHz - a.edgeHz)[0];
  if (worst === undefined || worst.edgeHz <= USABLE_PART_OF_RATE * rateHz) return [];
  const needed = Math.ceil(worst.edgeHz / USABLE_PART_OF_RATE);
  const detail =
    `found ${rateHz}, expected ${needed} or more: limit "${worst.name}" needs frequencies up to ` +
    `${round(worst.edgeHz)} Hz, and ${USABLE_PART_OF_RATE} of the rate is usable`;
  return [invalid(['sensors', at, 'rateHz'], detail)];
}

/** A span whose id is not sound is held to be named by none. */
function holdsFor(limit: Partial<Limit>, { id }: PlacedSpan): boolean {
  return limit.spans === undefined || (id !== undefined && limit.spans.includes(id));
}

/** EN 1990 A2.4.4.2.1(4)P: the greater of 30 Hz, 1.5 f1 and f3, as far as the definition knows them. */
function leastBandEdgeHz({ band }: Partial<Limit>, { frequenciesHz }: PlacedSpan): number {
  if (band === undefined) return 0;
  if (band !== 'EN 1990 A2') return band.upToHz;
  return Math.max(30, 1.5 * (frequenciesHz?.f1 ?? 0), frequenciesHz?.f3 ?? 0);
}

const invalid = (path: FieldPath, detail: string): DefinitionProblem => ({ code: 'DEFINITION_INVALID', path, detail });

const round = (value: number): number => Math.round(value * 1000) / 1000;
