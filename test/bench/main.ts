/** `npm run bench [-- section …]`: figures of this machine, as they are now. Quote ratios from one run: machines are noisy. */
import { benchClient } from './client.ts';
import { benchDecay } from './decay.ts';
import type { Figure } from './figure.ts';
import { benchLatency } from './latency.ts';
import { benchPipeline } from './pipeline.ts';
import { benchStart } from './start.ts';
import { benchStream } from './stream.ts';

const SECTIONS: Readonly<Record<string, () => Figure[] | Promise<Figure[]>>> = {
  pipeline: benchPipeline,
  decay: benchDecay,
  stream: benchStream,
  latency: benchLatency,
  client: benchClient,
  start: benchStart,
};

const wanted = process.argv.slice(2);
const unknown = wanted.filter((name) => !(name in SECTIONS));
if (unknown.length > 0) {
  console.error(`no section ${unknown.join(', ')}; there are ${Object.keys(SECTIONS).join(', ')}`);
  process.exit(2);
}
for (const [name, measure] of Object.entries(SECTIONS)) {
  if (wanted.length > 0 && !wanted.includes(name)) continue;
  console.log(`\n${name}`);
  for (const { what, value, unit, aim } of await measure()) {
    const number = value.toLocaleString('en', { maximumSignificantDigits: 4 });
    console.log(
      `  ${what.padEnd(78)} ${number.padStart(12)} ${unit.padEnd(10)} ${aim === undefined ? '' : `aim ${aim}`}`,
    );
  }
}
