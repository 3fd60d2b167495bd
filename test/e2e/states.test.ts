import { spawn, type ChildProcess } from 'node:child_process';
import { copyFile, mkdir, readFile, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { findingsOfAxe, openBrowser, sidewaysPx, type Browser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { ROOT, startServerProcess, temporaryFolder, type ServerProcess } from '../support/server.ts';

const LIMIT_MS = 180_000;

describe.skipIf(!available('chromium'))(
  'what a page says when it cannot say that all is well',
  { timeout: LIMIT_MS },
  () => {
    let data: Awaited<ReturnType<typeof temporaryFolder>>;
    let server: ServerProcess;
    let browser: Browser;
    let loggers: ChildProcess | null = null;

    /** What was begun, to be ended in the opposite order, however far it came. */
    const begun: (() => unknown)[] = [];
    beforeAll(async () => {
      data = await temporaryFolder('states');
      begun.push(() => data.remove());
      const bridges = join(data.path, 'bridges');
      await mkdir(bridges);
      const good = join(ROOT, 'simulator', 'bridges', 'ottermere.yaml');
      await copyFile(good, join(bridges, 'ottermere.yaml'));
      const text = (await readFile(good, 'utf8'))
        .replace('id: ottermere', 'id: bent')
        .replace('lengthM: 17.6', 'lengthM: -3');
      await writeFile(join(bridges, 'bent.yaml'), text);
      server = await startServerProcess([
        'serve',
        ...[
          '--bridges',
          bridges,
          '--data',
          join(data.path, 'data'),
          '--port',
          '0',
          '--broker-port',
          '0',
          '--log',
          'error',
        ],
      ]);
      begun.push(() => server.interrupt());
      browser = await openBrowser();
      begun.push(() => browser.close());
    }, LIMIT_MS);

    afterAll(async () => {
      loggers?.kill('SIGKILL');
      for (const undo of begun.reverse()) await undo();
    }, LIMIT_MS);

    it('says on Network and Bridges what is wrong in a definition, with line and field', async () => {
      const { page } = browser;
      await page.goto(server.url);
      const row = page.getByRole('article', { name: 'bent' });
      await row.getByText('bad definition').waitFor();
      expect(await row.textContent()).toMatch(/DEFINITION_\w+.*bent\.yaml.*lengthM/);
      await page.goto(`${server.url}/bridges/bent`);
      const complaint = page.getByRole('main').getByRole('alert');
      await complaint.waitFor();
      expect(await complaint.textContent()).toMatch(/bent\.yaml:\d+.*lengthM.*-3/);
      await page.goto(`${server.url}/live/bent`);
      await page.getByText(/not monitored: its definition cannot be used/).waitFor();
    });

    it('says "no data yet" before the first sample, and draws nothing as measured', async () => {
      const { page } = browser;
      await page.goto(`${server.url}/live/ottermere`);
      await page
        .getByText(/^No data yet/)
        .first()
        .waitFor();
      expect(await page.getByText('Measuring', { exact: true }).count()).toBe(0);
      await page.getByText('Not known whether a train is on the bridge').waitFor();
    });

    it('measures while the logger sends, and says "no data" when it has fallen silent', async () => {
      const { page } = browser;
      const words = [
        'simulate',
        '--bridge',
        'ottermere',
        '--train',
        'light engine',
        '--real-time',
        '--to',
        server.brokerUrl,
      ];
      loggers = spawn(process.execPath, ['server/main.ts', ...words], { cwd: ROOT, stdio: 'ignore' });
      await page.getByText('Measuring', { exact: true }).waitFor();
      await page.getByText('No train on the bridge').waitFor();
      loggers.kill('SIGKILL');
      await page.getByText(/^No data: monitoring has stopped/).waitFor();
      expect(await page.getByText('Measuring', { exact: true }).count()).toBe(0);
      expect(await page.getByText('No train on the bridge').count()).toBe(0);
      await page.getByText('Not known whether a train is on the bridge').waitFor();
      await page.getByRole('link', { name: /Unanswered alarms.*[1-9]/ }).waitFor();
      await page.goto(server.url);
      const row = page.getByRole('article', { name: 'Ottermere Trough' });
      await row.getByText('no data', { exact: true }).waitFor();
      expect(await row.textContent()).not.toMatch(/(^|\W)measuring/);
    });

    it('says so of an address that leads nowhere, of an unknown bridge and an unknown passage', async () => {
      const { page } = browser;
      await page.goto(`${server.url}/nowhere/at/all`);
      await page.getByRole('heading', { name: 'There is no such page' }).waitFor();
      await page.goto(`${server.url}/live`);
      await page.getByRole('heading', { name: 'Live: of which bridge?' }).waitFor();
      await page.getByRole('main').getByRole('link', { name: 'Ottermere Trough' }).waitFor();
      await page.goto(`${server.url}/live/atlantis`);
      await page.getByText('No bridge of this name is defined here').waitFor();
      await page.goto(`${server.url}/passage/ottermere-20260101-000000-0`);
      await page
        .getByRole('main')
        .getByText(/PASSAGE|NOT_FOUND|no passage/i)
        .first()
        .waitFor();
    });

    it('has no violation by axe in these states and does not scroll sideways on a telephone', async () => {
      const { page } = browser;
      await page.setViewportSize({ width: 390, height: 844 });
      const found: string[] = [];
      for (const path of [
        '/',
        '/live/ottermere',
        '/live/bent',
        '/bridges/bent',
        '/live/atlantis',
        '/alarms',
        '/nowhere',
      ]) {
        await page.goto(server.url + path);
        await page.getByText(/^UTC/).first().waitFor();
        await page.getByRole('main').waitFor();
        const sideways = await sidewaysPx(page);
        if (sideways > 0) found.push(`${path} can be scrolled by ${sideways} px`);
        for (const { rule, where, why } of await findingsOfAxe(page))
          found.push(`${path}: ${rule} at ${where}: ${why}`);
      }
      expect(found).toEqual([]);
    });
  },
);
