import { startServer, type Running } from './server.ts';
import type { ServerSettings } from './settings.ts';
import { stopOnSignal } from './signal.ts';

export { demonstration } from './demonstration.ts';

/** Runs a server until a signal ends it. */
export async function serve(settings: ServerSettings): Promise<Running> {
  const running = await startServer(settings);
  process.stdout.write(`Spanbeat: ${running.url}  (loggers: ${running.brokerUrl})\n`);
  process.stdout.write('Advisory only: no authority over train movement. Ctrl-C ends it.\n');
  stopOnSignal(() => running.stop());
  return running;
}
