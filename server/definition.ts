import { readFile } from 'node:fs/promises';
import type { BridgeDefinition } from '#core/contract/bridge.ts';
import { checkDefinition } from '#core/contract/definition-check.ts';
import type { Complaint } from '#core/contract/errors.ts';
import { fieldName } from '#core/contract/shape.ts';
import { placed, readYaml } from './yaml-text.ts';

/** A bridge definition with the text it was read from, which the store keeps beside it. */
export interface GivenDefinition {
  definition: BridgeDefinition;
  text: string;
}

export type DefinitionReading = { ok: true; value: GivenDefinition } | { ok: false; complaints: Complaint[] };

/**
 * Reads a bridge definition from YAML.
 *
 * @param text the file's text
 * @param file its name, for complaints
 * @returns the definition, or all complaints at once, each with file, line, column, field and expectation
 */
export function decodeDefinition(text: string, file: string): DefinitionReading {
  const reading = readYaml(text, file);
  if (!reading.ok) return reading;
  const { data, placeOf } = reading.value;
  const verdict = checkDefinition(data, isTimeZone);
  if (verdict.ok) return { ok: true, value: { definition: verdict.definition, text } };
  const complaints = verdict.problems
    .map(({ code, path, detail, atName }) => ({ code, path, detail, place: placeOf(path, atName) }))
    .sort((a, b) => a.place.line - b.place.line || a.place.column - b.place.column)
    .map(({ code, path, detail, place }) => ({
      code,
      where: placed(file, place),
      detail: `${fieldName(path, 'the definition')}: ${detail}`,
    }));
  return { ok: false, complaints };
}

/** Reads a definition file; one that cannot be opened is a complaint like any other. */
export async function readDefinition(file: string): Promise<DefinitionReading> {
  let text: string;
  try {
    text = await readFile(file, 'utf8');
  } catch (error) {
    const detail = error instanceof Error ? error.message : String(error);
    return { ok: false, complaints: [{ code: 'DEFINITION_UNREADABLE', where: file, detail }] };
  }
  return decodeDefinition(text, file);
}

function isTimeZone(name: string): boolean {
  try {
    new Intl.DateTimeFormat('en', { timeZone: name });
    return true;
  } catch {
    // RangeError is how ECMA-402 says "unknown".
    return false;
  }
}
