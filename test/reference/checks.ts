import { existsSync, readFileSync } from 'node:fs';
import { fileURLToPath } from 'node:url';
import { describe } from 'vitest';
import { Type, type Static, type TSchema } from 'typebox';
import { Value } from 'typebox/value';

/** Folder of outside values beside the checkout. It may be absent; then the tests that read it are left out. */
export const SHARED = fileURLToPath(new URL('../../../shared/', import.meta.url));

const CHECKS = `${SHARED}reference/checks.json`;

/** True where the outside values are at hand. */
export const checksPresent = existsSync(CHECKS);

if (!checksPresent) process.stderr.write('left out: tests that read ../shared/reference/checks.json\n');

/**
 * `describe` for tests that read the outside values. Call `check` inside `it`, not in the body of `describe`,
 * because the body is run also where the values are absent.
 */
export const describeChecks = describe.skipIf(!checksPresent);

/** `describe` for tests that read the open data in `../shared/data/<folder>`. */
export function describeData(folder: string) {
  const present = existsSync(`${SHARED}data/${folder}`);
  if (!present) process.stderr.write(`left out: tests that read ../shared/data/${folder}\n`);
  return describe.skipIf(!present);
}

/** Text of a file under `../shared/data`. */
export function sharedText(path: string): string {
  return readFileSync(`${SHARED}data/${path}`, 'utf8');
}

/** Rows of numbers of a text table; lines that begin with # are comments. */
export function sharedTable(path: string): number[][] {
  return sharedText(path)
    .split('\n')
    .map((line) => line.trim())
    .filter((line) => line !== '' && !line.startsWith('#'))
    .map((line) => line.split(/\s+/).map(Number));
}

export interface Check<Expected, Inputs> {
  id: string;
  source: string;
  formula: string;
  expected: Expected;
  inputs: Inputs;
  tolerance: { rel: number; abs: number };
}

const Group = Type.Object({
  id: Type.String(),
  source: Type.Optional(Type.String()),
  formula: Type.Optional(Type.String()),
  expected: Type.Unknown(),
  inputs: Type.Optional(Type.Unknown()),
  tol: Type.Optional(Type.Object({ rel: Type.Optional(Type.Number()), abs: Type.Optional(Type.Number()) })),
});
type Group = Static<typeof Group>;

let groups: Map<string, Group> | null = null;

/**
 * One group of outside values by its id. The schemas say what the test reads of it; extra fields are let pass.
 *
 * @example check('butter.hand', Type.Object({ K: Type.Number() })).expected.K // 0.3249196962329063
 */
export function check<E extends TSchema, I extends TSchema = TSchema>(
  id: string,
  expected: E,
  inputs?: I,
): Check<Static<E>, Static<I>> {
  groups ??= load();
  const group = groups.get(id);
  if (group === undefined) throw new Error(`checks.json has no group ${id}`);
  return {
    id,
    source: group.source ?? '',
    formula: group.formula ?? '',
    expected: Value.Parse(expected, group.expected),
    inputs: (inputs === undefined ? group.inputs : Value.Parse(inputs, group.inputs)) as Static<I>,
    tolerance: { rel: group.tol?.rel ?? 0, abs: group.tol?.abs ?? 0 },
  };
}

function load(): Map<string, Group> {
  const file = Value.Parse(Type.Object({ checks: Type.Array(Group) }), JSON.parse(readFileSync(CHECKS, 'utf8')));
  return new Map(file.checks.map((group) => [group.id, group]));
}
