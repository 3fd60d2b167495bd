/** Words for a JSON Schema and for values met where one was expected: what a person reads in a complaint. */

interface SchemaShape {
  type?: string;
  const?: unknown;
  anyOf?: SchemaShape[];
  pattern?: string;
  /** Of a text with a pattern: the pattern in words. */
  description?: string;
  minimum?: number;
  maximum?: number;
  exclusiveMinimum?: number;
  minLength?: number;
  maxLength?: number;
  minItems?: number;
  maxItems?: number;
  minProperties?: number;
  properties?: Record<string, SchemaShape>;
}

/**
 * The part of a schema that a path such as `#/properties/spans/items` points to.
 *
 * @returns undefined where the path leads nowhere
 */
export function schemaAt(root: unknown, schemaPath: string): unknown {
  return schemaPath
    .split('/')
    .slice(1)
    .reduce<unknown>(
      (schema, step) =>
        typeof schema === 'object' && schema !== null ? (schema as Record<string, unknown>)[step] : undefined,
      root,
    );
}

/**
 * What a schema expects, as the end of the sentence "expected …".
 *
 * @example describeSchema({ type: 'number', exclusiveMinimum: 0, maximum: 100 }) // 'a number, above 0, at most 100'
 */
export function describeSchema(schema: unknown): string {
  const shape = (schema ?? {}) as SchemaShape;
  if (shape.anyOf !== undefined) return shape.anyOf.map(describeSchema).join(' or ');
  if (shape.const !== undefined) return showFound(shape.const);
  switch (shape.type) {
    case 'number':
      return ['a number', ...bounds(shape)].join(', ');
    case 'integer':
      return ['a whole number', ...bounds(shape)].join(', ');
    case 'string':
      return describeText(shape);
    case 'array':
      return `a list${amount(shape.minItems, shape.maxItems, 'entry', 'entries')}`;
    case 'boolean':
      return 'true or false';
    case 'null':
      return 'null';
    case 'object': {
      const names = Object.keys(shape.properties ?? {});
      const least = shape.minProperties === undefined ? '' : `at least ${shape.minProperties} of `;
      return names.length === 0 ? 'a map' : `a map with ${least}${names.join(', ')}`;
    }
    default:
      return 'something else';
  }
}

/** A value as a complaint shows it, cut where it is long. */
export function showFound(value: unknown): string {
  if (value === undefined || value === null) return 'nothing';
  if (Array.isArray(value)) return `a list of ${value.length}`;
  if (typeof value === 'object') return 'a map';
  const text = typeof value === 'string' ? JSON.stringify(value) : `${value as number}`;
  return text.length <= 60 ? text : `${text.slice(0, 57)}…`;
}

function bounds({ minimum, maximum, exclusiveMinimum }: SchemaShape): string[] {
  const words: string[] = [];
  if (exclusiveMinimum !== undefined) words.push(`above ${exclusiveMinimum}`);
  if (minimum !== undefined) words.push(`at least ${minimum}`);
  if (maximum !== undefined) words.push(`at most ${maximum}`);
  return words;
}

function describeText({ pattern, description, minLength, maxLength }: SchemaShape): string {
  if (pattern !== undefined && description !== undefined) return description;
  if (pattern === undefined) return `a text${amount(minLength, maxLength, 'character', 'characters')}`;
  const found = PATTERNS.find(({ source }) => source === pattern);
  return found?.words ?? `a text that fits ${pattern}`;
}

const PATTERNS = [
  {
    source: '^[A-Za-z0-9][A-Za-z0-9_.-]{0,31}$',
    words: 'an id: up to 32 letters, digits, dots, dashes or underscores, a letter or digit first',
  },
  {
    source: '^[a-z0-9][a-z0-9-]{0,31}$',
    words: 'an id: up to 32 small letters, digits or dashes, a letter or digit first',
  },
];

function amount(least: number | undefined, most: number | undefined, one: string, many: string): string {
  if (least !== undefined && least === most) return ` of ${least} ${least === 1 ? one : many}`;
  if (least !== undefined && most !== undefined) return ` of ${least} to ${most} ${many}`;
  if (least !== undefined) return ` of at least ${least} ${least === 1 ? one : many}`;
  if (most !== undefined) return ` of at most ${most} ${most === 1 ? one : many}`;
  return '';
}
