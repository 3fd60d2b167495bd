import { counted } from '#core/contract/counted.ts';
import { readDefinition } from '../definition.ts';
import { complain, EXIT, type Console } from './outcome.ts';

/**
 * `check FILE…`: reads bridge definitions and tells all that is wrong in them.
 *
 * @returns exit code
 */
export async function check(files: readonly string[], console: Console): Promise<number> {
  let exit: number = EXIT.good;
  for (const file of files) {
    const reading = await readDefinition(file);
    if (!reading.ok) {
      exit = Math.max(exit, complain(reading.complaints, console));
      continue;
    }
    const { id, name, spans, sensors, limits } = reading.value.definition;
    const counts = [counted(spans.length, 'span'), counted(sensors.length, 'sensor'), counted(limits.length, 'limit')];
    await console.out(`${file}: good; ${id}, ${name}: ${counts.join(', ')}\n`);
  }
  return exit;
}
