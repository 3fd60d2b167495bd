import { BridgeDefinition } from './bridge.ts';
import { inconsistencies, type DefinitionProblem, type SoundItem } from './definition-consistency.ts';
import { isMap, shapeProblems, valueAt, type FieldPath, type ShapeProblem } from './shape.ts';

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
  const { problems: shape, all } = shapeProblems(BridgeDefinition, data, LIMIT_ERRORS);
  const wrong = shape.map((problem): DefinitionProblem => ({ code: 'DEFINITION_INVALID', ...problem }));
  const problems = all ? [...wrong, ...inconsistencies(soundParts(data, shape), knownTimeZone)] : wrong;
  if (problems.length > 0) return { ok: false, problems: problems.slice(0, LIMIT_PROBLEMS) };
  return { ok: true, definition: data as BridgeDefinition };
}

// what is sound

/** The definition without the fields that the schema found wrong. */
function soundParts(data: unknown, shape: readonly ShapeProblem[]): Parameters<typeof inconsistencies>[0] {
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

function soundItems(entries: unknown, list: string, shape: readonly ShapeProblem[]): SoundItem<unknown>[] {
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
