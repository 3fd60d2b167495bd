import { readFileSync } from 'node:fs';
import { enableCompileCache } from 'node:module';
import { fileURLToPath } from 'node:url';

/** The command line: `spanbeat serve`, `demo`, `analyse`, `simulate`, `check`, `schema`. */
keepCompiled();
const [{ processConsole }, { complainOf }, { createProgram }, { endWithNpm }] = await Promise.all([
  import('./command/console.ts'),
  import('./command/outcome.ts'),
  import('./command/program.ts'),
  import('./signal.ts'),
]);
endWithNpm();
const { version } = JSON.parse(readFileSync(new URL('../package.json', import.meta.url), 'utf8')) as {
  version: string;
};
const streams = processConsole();

const exit = await createProgram(version, streams)
  .run(process.argv.slice(2))
  .catch((error: unknown) => complainOf(error, streams));
// A server goes on; it ends by a signal, which signal.ts hears.
if (exit !== null) process.exitCode = exit;

/**
 * Code without its types, compiled, is kept beside the packages: the next start takes half of the time, and each thread
 * less memory. Node compares it with the sources; a folder that cannot be written does no harm.
 */
function keepCompiled(): void {
  const folder = fileURLToPath(new URL('../node_modules/.cache/compiled', import.meta.url));
  const { directory } = enableCompileCache(folder);
  // Threads take it up by the environment.
  if (directory !== undefined) process.env['NODE_COMPILE_CACHE'] ??= folder;
}
