import { fileURLToPath } from 'node:url';
import { DEMONSTRATION_FILES } from '../../simulator/demonstration.ts';

/** The file that is meant: that of a bridge of the demonstration by its id, else the path itself. */
export function definitionFile(name: string): string {
  const known = DEMONSTRATION_FILES.find((url) => url.pathname.endsWith(`/${name}.yaml`));
  return known === undefined ? name : fileURLToPath(known);
}
