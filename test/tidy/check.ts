/** Every check that does not run the program: types, lint, form, walls, dead code. `npm run check`. */
import { spawnSync } from 'node:child_process';

const CHECKS: readonly (readonly [name: string, command: string])[] = [
  ['types', 'tsc -b --pretty && tsc -p test --pretty'],
  ['components', 'svelte-check --workspace client --tsconfig tsconfig.json --fail-on-warnings --output human'],
  ['lint', 'eslint --config test/tidy/eslint.config.js --max-warnings 0 server client simulator test'],
  ['form', 'prettier --check --log-level warn .'],
  ['walls', 'depcruise --config .dependency-cruiser.cjs --output-type err server client simulator test'],
  ['dead code', 'knip --no-progress'],
];

const wanted = process.argv.slice(2);
let failed = 0;
for (const [name, command] of CHECKS) {
  if (wanted.length > 0 && !wanted.includes(name)) continue;
  const started = performance.now();
  const run = spawnSync(command, { shell: true, encoding: 'utf8', env: process.env });
  const seconds = ((performance.now() - started) / 1000).toFixed(1);
  const good = run.status === 0;
  console.log(`${good ? 'ok  ' : 'FAIL'} ${name} (${seconds} s)`);
  if (!good) {
    failed += 1;
    console.log(run.stdout + run.stderr);
  }
}
process.exitCode = failed === 0 ? 0 : 1;
