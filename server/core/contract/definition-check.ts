import type { TSchema } from 'typebox';
import { Settings } from 'typebox/system';
import { Value } from 'typebox/value';
import { BridgeDefinition } from './bridge.ts';
import { inconsistencies, type DefinitionProblem, type FieldPath, type SoundItem } from './definition-consistency.ts';
import { nearestName } from './nearest-name.ts';
import { describeSchema, schemaAt, showFound } from './schema-words.ts';

export type DefinitionVerdict =
  { ok: true; definition: BridgeDefinition } | { ok: false; problems: DefinitionProblem[] };

/** Problems listed of one definition; a file worse than that is to be corrected from the top anyway. */
const LIMIT_PROBLEMS = 50;

/** Errors that the schema library is asked for; one field may have several. Where there are more, not all are known. */
const LIMIT_ERRORS = 4 * LIMIT_PROBLEMS;

/**
 * Judges a parsed bridge definition: its shape by the schema, and, of all fields that are sound by it, what no schema
 * can say (references, units, order of limits, places, rates). What depends on a field that is not sound is not judged.
 *
 * @param data what the YAML or JSON text held
 * @param knownTimeZone whether an IANA time-zone name is known on this machine
 * @returns the definition, or up to fifty problems: first those of single fields, then those of several
 * @example checkDefinition({}, () => true) // { ok: false, problems: [… 'chainageKm' is missing …] }
 */
export function checkDefinition(data: unknown, knownTimeZone: (name: string) => boolean): DefinitionVerdict {
  const errors = schemaErrors(data);
  const shape = shapeProblems(errors, data);
  const known = errors.length < LIMIT_ERRORS;
  const problems = known ? [...shape, ...inconsistencies(soundParts(data, shape), knownTimeZone)] : shape;
  if (problems.length > 0) return { ok: false, problems: problems.slice(0, LIMIT_PROBLEMS) };
  return { ok: true, definition: data as BridgeDefinition };
}

/** `sensors[2].rateHz`; the root is called so. */
export function fieldName(path: FieldPath): string {
  if (path.length === 0) return 'the definition';
  return path.map((step, at) => (typeof step === 'number' ? `[${step}]` : at === 0 ? step : `.${step}`)).join('');
}

// the schema

function shapeProblems(errors: ReturnType<typeof schemaErrors>, data: unknown): DefinitionProblem[] {
  const found = new Map<string, DefinitionProblem>();
  const note = (problem: DefinitionProblem): void => {
    const key = JSON.stringify(problem.path);
    if (!found.has(key)) found.set(key, problem);
  };
  for (const error of errors) {
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
  Settings.Set({ maxErrors: LIMIT_ERRORS });
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

// what is sound

/** The definition without the fields that the schema found wrong. */
function soundParts(data: unknown, shape: readonly DefinitionProblem[]): Parameters<typeof inconsistencies>[0] {
  // What the schema left standing is of the type that the schema gives it.
  const items = <T>(list: string): SoundItem<T>[] => soundItems(valueAt(data, [list]), list, shape);
  const timeZone = valueAt(data, ['timeZone']);
  return {
    timeZone: typeof timeZone === 'string' ? timeZone : null,
    spans: items('spans'),
    loggers: items('loggers'),
    sensors: items('sensors'),
    limits: items('limits'),
  };
}

function soundItems(entries: unknown, list: string, shape: readonly DefinitionProblem[]): SoundItem<unknown>[] {
  if (!Array.isArray(entries)) return [];
  const own = shape.filter(({ path }) => path[0] === list && path.length > 1);
  return entries.map((entry: unknown, at) => {
    let item = isMap(entry) ? entry : {};
    const lacks = new Set<string>();
    for (const { path } of own) {
      if (path[1] !== at) continue;
      item = without(item, path.slice(2));
      if (typeof path[2] === 'string' && !Object.hasOwn(item, path[2])) lacks.add(path[2]);
    }
    return { at, item, lacks };
  });
}

/** A map without the field that a path leads to; an inner list is left out as a whole. */
function without(map: Record<string, unknown>, [step, ...rest]: FieldPath): Record<string, unknown> {
  if (step === undefined || !Object.hasOwn(map, step)) return map;
  const { [step]: inner, ...others } = map;
  return rest.length > 0 && isMap(inner) ? { ...others, [step]: without(inner, rest) } : others;
}

const isMap = (value: unknown): value is Record<string, unknown> =>
  typeof value === 'object' && value !== null && !Array.isArray(value);
