import { readFileSync } from 'node:fs';
import { processConsole } from './command/console.ts';
import { complainOf } from './command/outcome.ts';
import { createProgram } from './command/program.ts';

/** The command line: `spanbeat serve`, `demo`, `analyse`, `simulate`, `check`, `schema`. */
const { version } = JSON.parse(readFileSync(new URL('../package.json', import.meta.url), 'utf8')) as {
  version: string;
};
const streams = processConsole();

const exit = await createProgram(version, streams)
  .run(process.argv.slice(2))
  .catch((error: unknown) => complainOf(error, streams));
// A server goes on; it ends by a signal, which app.ts hears.
if (exit !== null) process.exitCode = exit;
