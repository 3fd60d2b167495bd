import { openHistory } from '../../server/history/store.ts';
import { aDefinition, aPassage, aWindow, anAlarm, DAWN } from '../support/specimen.ts';

/**
 * A process to be killed: commits passages with an alarm each, from the number given, and says each one's number on
 * standard output when its commit has resolved.
 */
const [folder = '', first = '0'] = process.argv.slice(2);
const store = await openHistory({
  file: `${folder}/history.duckdb`,
  archiveFolder: `${folder}/archive`,
  clock: () => DAWN,
  report: (complaint) => process.stdout.write(`complaint ${complaint.code}\n`),
});
await store.saveDefinition(aDefinition(), 'id: ottermere', DAWN);
process.stdout.write('open\n');
for (let i = Number(first); ; i++) {
  const onMicros = DAWN + i * 60_000_000;
  const passage = aPassage({ onMicros, peaks: { A1: 2.5, A2: 2.4 } });
  const alarms = [anAlarm(onMicros, 'AL', { passage: passage.id })];
  await store.commitPassage({ passage, channels: aWindow(passage, { seconds: 0.5 }), alarms });
  process.stdout.write(`done ${i}\n`);
}
