import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import type { PassagePage } from '#core/contract/api.ts';
import { openBrowser, type Browser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { freePort } from '../support/mosquitto.ts';
import { ask, startServerProcess, temporaryFolder, type ServerProcess } from '../support/server.ts';
import { passages, settledAlarm } from './places.ts';

const LIMIT_MS = 300_000;
const BRIDGE = 'ottermere';

/** Times are told, not judged: how fast a test's machine is says nothing about the program. */
describe.skipIf(!available('chromium'))('npm run demo', { timeout: LIMIT_MS }, () => {
  let data: Awaited<ReturnType<typeof temporaryFolder>>;
  let port: number;
  let server: ServerProcess | null = null;
  let browser: Browser;
  let begunMs = 0;

  /** The command as the README gives it, with a port and a folder of the test's own. */
  const start = async (): Promise<ServerProcess> => {
    begunMs = performance.now();
    return startServerProcess(
      ['--port', String(port), '--data', data.path, '--past-days', '0'],
      ['npm', 'run', 'demo', '--'],
    );
  };
  const tell = (what: string): void => {
    process.stderr.write(`npm run demo: ${what} after ${((performance.now() - begunMs) / 1000).toFixed(1)} s\n`);
  };
  const firstSample = async (): Promise<void> => {
    await browser.page.goto(`${server!.url}/live/${BRIDGE}`);
    await browser.page.getByText('Measuring', { exact: true }).waitFor();
    const cell = browser.page.getByRole('table', { name: /^Deck acceleration/ }).getByRole('row', { name: /^A3/ });
    await cell
      .getByText(/^0\.\d+$/)
      .first()
      .waitFor();
  };

  /** What was begun, to be ended in the opposite order, however far it came. */
  const begun: (() => Promise<unknown>)[] = [];
  beforeAll(async () => {
    data = await temporaryFolder('start');
    begun.push(
      () => data.remove(),
      async () => server?.kill(),
    );
    port = await freePort();
    browser = await openBrowser();
    begun.push(() => browser.close());
  }, LIMIT_MS);

  afterAll(async () => {
    for (const undo of begun.reverse()) await undo();
  }, LIMIT_MS);

  it('shows samples, records a passage and raises an alarm', async () => {
    server = await start();
    await firstSample();
    tell('first start, first sample in the browser');
    await passages(server, BRIDGE);
    tell('first start, passage recorded');
    const alarm = await settledAlarm(server, BRIDGE);
    tell('first start, alarm raised and confirmed by the record');
    expect(alarm).toMatchObject({ bridge: BRIDGE, severity: 'IL', verdict: 'confirmed' });
  });

  it('ends by Ctrl-C without leaving a process', async () => {
    await browser.page.goto('about:blank');
    begunMs = performance.now();
    await server!.interrupt();
    tell('ended');
    expect(server!.groupAlive()).toBe(false);
  });

  it('keeps the history for the second start', async () => {
    server = await start();
    tell('second start, address on the terminal');
    await firstSample();
    tell('second start, first sample in the browser');
    const { rows } = await ask<PassagePage>(server, `/api/passages?bridge=${BRIDGE}&order=time`);
    expect(rows.length).toBeGreaterThanOrEqual(2);
    await browser.page.getByRole('region', { name: 'Last passage' }).getByText(/axles/).first().waitFor();
    await browser.page.getByRole('link', { name: /Unanswered alarms.*[1-9]\d*\s*IL/ }).waitFor();
    await server.interrupt();
    expect(server.groupAlive()).toBe(false);
  });
});
