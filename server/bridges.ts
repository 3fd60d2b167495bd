import { readdir, stat } from 'node:fs/promises';
import { basename, join } from 'node:path';
import { sentence, SpanbeatError, type Complaint } from '#core/contract/errors.ts';
import { readDefinition, type GivenDefinition } from './definition.ts';

/** A definition file that cannot be used, under the name its bridge would have. */
export interface BadDefinition {
  id: string;
  complaints: Complaint[];
}

export interface Definitions {
  sound: GivenDefinition[];
  bad: BadDefinition[];
}

/**
 * All definitions of some files and folders (`*.yaml`, `*.yml`), by file name. One that is bad costs nobody but itself.
 *
 * @throws SpanbeatError DEFINITION_UNREADABLE where a path cannot be listed
 */
export async function readDefinitions(paths: readonly string[]): Promise<Definitions> {
  const files = (await Promise.all(paths.map(filesOf))).flat();
  const sound = new Map<string, GivenDefinition>();
  const bad: BadDefinition[] = [];
  for (const file of files) {
    const reading = await readDefinition(file);
    const id = basename(file).replace(/\.ya?ml$/, '');
    if (!reading.ok) bad.push({ id, complaints: reading.complaints });
    else if (sound.has(reading.value.definition.id)) {
      const detail = `another file defines ${reading.value.definition.id}`;
      bad.push({ id, complaints: [{ code: 'DEFINITION_DUPLICATE_ID', where: file, detail }] });
    } else sound.set(reading.value.definition.id, reading.value);
  }
  // A bad file does not take the name of a sound bridge.
  const named = bad.map((one) => (sound.has(one.id) ? { ...one, id: `${one.id} (file)` } : one));
  return { sound: [...sound.values()], bad: named };
}

async function filesOf(path: string): Promise<string[]> {
  try {
    if (!(await stat(path)).isDirectory()) return [path];
    const names = (await readdir(path)).filter((name) => /\.ya?ml$/.test(name));
    return names.toSorted().map((name) => join(path, name));
  } catch (failure) {
    const detail = failure instanceof Error ? failure.message : String(failure);
    throw new SpanbeatError({ code: 'DEFINITION_UNREADABLE', where: path, detail });
  }
}

export const badComplaint = ({ complaints }: BadDefinition): string =>
  complaints.slice(0, 3).map(sentence).join(' ') || 'the definition cannot be used';
