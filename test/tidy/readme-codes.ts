/** The README's table of error codes, from the one table in the code. `node test/tidy/readme-codes.ts --write` renews it. */
import { readFileSync, writeFileSync } from 'node:fs';
import { ERRORS } from '#core/contract/errors.ts';

const README = new URL('../../README.md', import.meta.url);
const BEGIN = '<!-- codes: begin -->';
const END = '<!-- codes: end -->';

/** The README as it is, and as it should be. */
export function readmeWithCodes(): { now: string; wanted: string } {
  const now = readFileSync(README, 'utf8');
  const rows = Object.entries(ERRORS).map(([code, { what, remedy }]) => `| \`${code}\` | ${what} | ${remedy} |`);
  const table = ['| code | what happened | what to do |', '|---|---|---|', ...rows].join('\n');
  const begin = now.indexOf(BEGIN);
  const end = now.indexOf(END);
  if (begin < 0 || end < begin) throw new Error('the README has lost the marks of its table of codes');
  return { now, wanted: `${now.slice(0, begin + BEGIN.length)}\n\n${table}\n\n${now.slice(end)}` };
}

if (process.argv.includes('--write')) writeFileSync(README, readmeWithCodes().wanted);
