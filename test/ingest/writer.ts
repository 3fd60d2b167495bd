/** Child process of the journal's kill test: appends records as fast as they are durable and prints each number that is. */
import { writeSync } from 'node:fs';
import { openJournal } from '../../server/ingest/journal.ts';
import { payloadOf } from './written.ts';

const [folder, first] = process.argv.slice(2) as [string, string];
const journal = await openJournal(folder, {
  maxBytes: 4 * 1024 * 1024,
  maxHours: 1000,
  clock: () => Date.now() * 1000,
  report: () => undefined,
});
for (let number = Number(first); ; number += 1) {
  const payload = payloadOf(number);
  const own = number;
  const { durable } = journal.append({ receivedMicros: own, topic: 'spanbeat/b/L1/samples', payload });
  // Several in one write, now and then one alone.
  const told = durable.then(() => writeSync(1, `${own}\n`));
  if (number % 5 === 0) await told;
}
