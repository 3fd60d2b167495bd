import type { TSchema } from 'typebox';
import { Settings } from 'typebox/system';
import { Value } from 'typebox/value';
import { nearestName } from './nearest-name.ts';
import { describeSchema, schemaAt, showFound } from './schema-words.ts';

/** Steps from the root of some data to a field. */
export type FieldPath = readonly (string | number)[];

export interface ShapeProblem {
  path: FieldPath;
  /** What was found, what was expected; without the path. */
  detail: string;
  /** True where the problem is a name, not its value: an unknown field. */
  atName?: boolean;
}

/** As many as a person reads. */
const LIMIT_ERRORS = 50;

/**
 * What in some data does not fit a schema, in words: what was found, and what is expected or allowed there.
 *
 * @param root the schema
 * @param data what was given
 * @param limitErrors errors that the schema library is asked for; one field may have several
 * @returns one problem a field; `all` is false where there may be more than those
 * @example shapeProblems(Type.Literal(1), 2).problems[0].detail // 'found 2, expected 1'
 */
export function shapeProblems(
  root: TSchema,
  data: unknown,
  limitErrors = LIMIT_ERRORS,
): { problems: ShapeProblem[]; all: boolean } {
  const found = new Map<string, ShapeProblem>();
  const note = (problem: ShapeProblem): void => {
    const key = JSON.stringify(problem.path);
    if (!found.has(key)) found.set(key, problem);
  };
  const errors = schemaErrors(root, data, limitErrors);
  for (const error of errors) {
    // The parts of a choice are told by the choice itself; `boolean` doubles `additionalProperties`.
    if (error.keyword === 'boolean' || error.schemaPath.includes('/anyOf/')) continue;
    const path = pointerSteps(error.instancePath, data);
    const schema = schemaAt(root, error.schemaPath);
    if (error.keyword === 'additionalProperties') {
      for (const name of error.params.additionalProperties) note(unknownField([...path, name], schema));
    } else if (error.keyword === 'required') {
      for (const name of error.params.requiredProperties) note(missingField([...path, name], schema));
    } else {
      const detail = `found ${showFound(valueAt(data, path))}, expected ${describeSchema(schema)}`;
      note({ path, detail });
    }
  }
  return { problems: [...found.values()], all: errors.length < limitErrors };
}

/** `sensors[2].rateHz`; the root is called by its own name. */
export function fieldName(path: FieldPath, root: string): string {
  if (path.length === 0) return root;
  return path.map((step, at) => (typeof step === 'number' ? `[${step}]` : at === 0 ? step : `.${step}`)).join('');
}

/** All errors, where typebox by itself stops at eight. */
function schemaErrors(root: TSchema, data: unknown, limit: number): ReturnType<typeof Value.Errors> {
  const before = Settings.Get().maxErrors;
  Settings.Set({ maxErrors: limit });
  try {
    return Value.Errors(root, data);
  } finally {
    Settings.Set({ maxErrors: before });
  }
}

function unknownField(path: FieldPath, schema: unknown): ShapeProblem {
  const names = Object.keys(propertiesOf(schema));
  const near = nearestName(String(path.at(-1)), names);
  const hint = near === null ? `known here are ${names.join(', ')}` : `did you mean ${near}?`;
  return { path, detail: `unknown field; ${hint}`, atName: true };
}

function missingField(path: FieldPath, schema: unknown): ShapeProblem {
  const expected = describeSchema(propertiesOf(schema)[String(path.at(-1))]);
  return { path, detail: `found nothing, expected ${expected}` };
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

export function valueAt(data: unknown, path: FieldPath): unknown {
  return path.reduce<unknown>(
    (value, step) =>
      typeof value === 'object' && value !== null && Object.hasOwn(value, step)
        ? (value as Record<string | number, unknown>)[step]
        : undefined,
    data,
  );
}

export const isMap = (value: unknown): value is Record<string, unknown> =>
  typeof value === 'object' && value !== null && !Array.isArray(value);
