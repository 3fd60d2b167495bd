import { execFileSync } from 'node:child_process';
import { existsSync } from 'node:fs';
import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import type { Alarm } from '#core/contract/alarm.ts';
import type { PassageView } from '#core/contract/api.ts';
import type { Page } from 'playwright-core';
import { findingsOfAxe, openBrowser, sidewaysPx, wear, type Browser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { freePort } from '../support/mosquitto.ts';
import { ask, startServerProcess, temporaryFolder, until, type ServerProcess } from '../support/server.ts';
import { pressOn, tabTo } from './keyboard.ts';
import { passages, placesOf, settledAlarm } from './places.ts';

const BRIDGE = 'ottermere';
const LIMIT_MS = 240_000;

/** One evening at the desk: each test goes on where the one before it ended. */
describe.skipIf(!available('chromium'))('in a browser, over the demonstration', { timeout: LIMIT_MS }, () => {
  let data: Awaited<ReturnType<typeof temporaryFolder>>;
  let port: number;
  let server: ServerProcess;
  let browser: Browser;
  let page: Page;
  const start = (): Promise<ServerProcess> =>
    startServerProcess(['demo', '--port', String(port), '--data', data.path, '--past-days', '0']);

  /** What was begun, to be ended in the opposite order, however far it came. */
  const begun: (() => Promise<unknown>)[] = [];
  beforeAll(async () => {
    data = await temporaryFolder('journeys');
    begun.push(() => data.remove());
    port = await freePort();
    browser = await openBrowser();
    begun.push(() => browser.close());
    page = browser.page;
    server = await start();
    begun.push(() => server.interrupt());
  }, LIMIT_MS);

  afterAll(async () => {
    for (const undo of begun.reverse()) await undo();
  }, LIMIT_MS);

  it('watches a train cross on Live: axles, strips, and what it did, without a mouse', async () => {
    await page.goto(server.url);
    await pressOn(page, page.getByRole('navigation').getByRole('link', { name: 'Live' }));
    await page.waitForURL('**/live/ottermere');
    const strips = page.getByRole('table', { name: /^Deck acceleration/ });
    const largest = strips.getByRole('row', { name: /^A3/ }).getByRole('cell').nth(2);
    await expectText(largest, /^\d/);
    expect(await inkOf(page)).toBeGreaterThan(1);

    await page.getByText(/^Passage in progress: \d+ axles? entered/).waitFor();
    const last = page.getByRole('region', { name: 'Last passage' });
    await last.getByText(/^\s*\d+ axles?/).waitFor();
    const [first] = await passages(server, BRIDGE);
    expect(await last.textContent()).toContain(`${first!.axles} axles`);
    expect(await last.textContent()).toContain(`${first!.speedMs!.toFixed(1)} m/s`);
    await page.getByText('Measuring', { exact: true }).waitFor();
  });

  it('closes the choice of channels by Escape and stands again where it was opened', async () => {
    const choose = page.getByRole('button', { name: 'Choose channels' });
    await pressOn(page, choose);
    await page.getByRole('checkbox', { name: /^A1/ }).focus();
    await page.keyboard.press('Escape');
    await page.getByRole('checkbox', { name: /^A1/ }).waitFor({ state: 'detached' });
    expect(await choose.evaluate((button) => button === document.activeElement)).toBe(true);
  });

  it('chooses the sensor of the spectrum, and the address keeps it', async () => {
    await page.getByRole('combobox', { name: 'Sensor of the spectrum' }).selectOption('A4');
    await page.getByText(/^A4, .*a line a minute/).waitFor();
    expect(new URL(page.url()).searchParams.get('spectrum')).toBe('A4');
    await page.getByRole('combobox', { name: 'Sensor of the spectrum' }).selectOption('A1');
    await page.getByText(/^A1, .*a line a minute/).waitFor();
    expect(new URL(page.url()).search).toBe('');
  });

  it('hears of the alarm on whatever page it is', async () => {
    await page.getByRole('link', { name: /Unanswered alarms.*[1-9]\d*\s*IL/ }).waitFor();
    const alarm = await settledAlarm(server, BRIDGE);
    expect(alarm.severity).toBe('IL');
  });

  it('opens the last passage by keyboard and finds the measures of the history', async () => {
    await pressOn(page, page.getByRole('link', { name: 'Open passage' }));
    await page.waitForURL('**/passage/**');
    const id = new URL(page.url()).pathname.split('/').at(-1)!;
    const { passage } = await ask<PassageView>(server, `/api/passages/${id}`);
    await page.getByRole('heading', { level: 1, name: new RegExp(`^${passage.axleCount.value} axles`) }).waitFor();
    const peak = passage.peak.measured.value!.toFixed(2);
    await page
      .getByRole('row', { name: new RegExp(`^Peak deck acceleration, ${passage.peak.sensor} ${peak} m/s²`) })
      .waitFor();
    await page.getByRole('heading', { name: 'Record section' }).waitFor();
  });

  it('lets another sensor be chosen and the number be computed again to the same bits', async () => {
    await pressOn(page, page.getByRole('main').getByRole('button', { name: /^A1/ }).first());
    await page.waitForURL('**sensor=A1**');
    await pressOn(page, page.getByRole('button', { name: 'Compute again' }));
    await page
      .getByText(/same bits|to the bit|bit for bit|identical/i)
      .first()
      .waitFor();
  });

  it('goes back and forward through what was seen', async () => {
    const here = page.url();
    await page.goBack(); // the choice of a sensor was no step of its own
    await page.waitForURL('**/live/ottermere');
    await page.getByRole('heading', { name: 'Long section' }).waitFor();
    await page.goBack();
    await page.getByRole('heading', { name: 'Network', level: 1 }).waitFor();
    await page.goForward();
    await page.waitForURL('**/live/ottermere');
    await page.goForward();
    await page.waitForURL(here);
    await page.getByRole('heading', { name: 'Measures' }).waitFor();
  });

  it('compares a passage with an earlier one, chosen by keyboard', async () => {
    const [earlier, later] = await passages(server, BRIDGE, 2);
    await pressOn(page, page.getByRole('navigation').getByRole('link', { name: 'Passages' }));
    await page.waitForURL('**/passages/ottermere');
    const boxes = page.getByRole('checkbox', { name: /^Compare the passage/ });
    await until('two rows', async () => (await boxes.count()) >= 2);
    await pressOn(
      page,
      page
        .getByRole('row')
        .filter({ has: page.locator(`a[href$="${earlier!.id}"]`) })
        .getByRole('checkbox'),
      'Space',
    );
    await page.keyboard.press('Shift+Tab');
    await pressOn(
      page,
      page
        .getByRole('row')
        .filter({ has: page.locator(`a[href$="${later!.id}"]`) })
        .getByRole('checkbox'),
      'Space',
    );
    await page.evaluate(() => document.body.focus());
    await pressOn(page, page.getByRole('link', { name: /^Compare .* with / }));
    await page.waitForURL(`**/passage/${later!.id}?with=${earlier!.id}`);
    await page.getByRole('heading', { name: 'Compared with an earlier passage' }).waitFor();
    const speeds = page.getByRole('row', { name: /^Speed/ }).last();
    expect(await speeds.textContent()).toContain(Math.abs(earlier!.speedMs!).toFixed(1));
    expect(await speeds.textContent()).toContain(Math.abs(later!.speedMs!).toFixed(1));
  });

  it('acknowledges the alarm with a name and a note, by keyboard', async () => {
    const alarm = await settledAlarm(server, BRIDGE);
    await pressOn(page, page.getByRole('link', { name: /Unanswered alarms/ }));
    await page.waitForURL('**/alarms/**');
    await pressOn(page, page.locator(`[data-alarm="${alarm.id}"]`));
    await page.waitForURL(`**/alarms/${encodeURIComponent(alarm.id)}`);
    await page
      .getByText(/no authority over train movement/)
      .first()
      .waitFor();
    await tabTo(page, page.getByLabel('Your name'));
    await page.keyboard.type('Duty engineer 7');
    await page.keyboard.press('Tab');
    await page.keyboard.type('Track looked at, nothing found; bridge engineer was called.');
    await pressOn(page, page.getByRole('button', { name: 'Acknowledge' }));
    await page.getByRole('heading', { name: 'Answered', exact: true }).waitFor();
    const answered = await ask<Alarm>(server, `/api/alarms/${encodeURIComponent(alarm.id)}`);
    expect(answered.acknowledged).toMatchObject({
      by: 'Duty engineer 7',
      note: 'Track looked at, nothing found; bridge engineer was called.',
    });
  });

  it('prints a passage as an A4 document with title block, bridge and advisory sentence', async () => {
    const alarm = await settledOrAnswered(server);
    await page.goto(`${server.url}/passage/${alarm.passage!}`);
    await page.getByRole('button', { name: 'Print passage sheet' }).waitFor();
    await page.locator('main canvas').first().waitFor();
    const file = join(data.path, 'sheet.pdf');
    await page.pdf({ path: file, preferCSSPageSize: true, printBackground: true });
    const boxes = [...(await readFile(file, 'latin1')).matchAll(/\/MediaBox\s*\[\s*0 0 ([\d.]+) ([\d.]+)\s*\]/g)];
    expect(boxes.length).toBeGreaterThan(0);
    for (const [, width, height] of boxes) {
      // ISO 216: A4 is 210 mm × 297 mm; a point is 1/72 inch. Chromium rounds pages to whole CSS pixels (0.75 pt).
      expect(Math.abs(Number(width) - (210 / 25.4) * 72)).toBeLessThan(0.75);
      expect(Math.abs(Number(height) - (297 / 25.4) * 72)).toBeLessThan(0.75);
    }
    const text = textOfPdf(file);
    if (text === null) return; // poppler is not needed to run the tests; the paper size was checked
    const pages = text.split('\f').filter((each) => each.trim() !== '');
    expect(pages.length).toBe(2);
    for (const [index, each] of pages.entries()) {
      expect(each).toContain('Ottermere Trough');
      expect(each).toContain('Passage sheet');
      expect(each).toContain(alarm.passage!);
      expect(each).toContain(`${index + 1} of 2`);
      expect(each).toContain('no authority over train movement');
    }
  });

  it('shows each place by its address, without a violation by axe, in both themes, wide and narrow', async () => {
    const alarm = await settledOrAnswered(server);
    const found: string[] = [];
    const wide: string[] = [];
    for (const width of [1440, 390]) {
      await page.setViewportSize({ width, height: 900 });
      for (const { name, path, drawn } of placesOf(BRIDGE, alarm.passage!, alarm.id)) {
        await page.goto(server.url + path);
        await drawn(page);
        const sideways = await sidewaysPx(page);
        if (sideways > 0) wide.push(`${name} at ${width} px can be scrolled by ${sideways} px`);
        for (const theme of ['paper', 'night'] as const) {
          await wear(page, theme);
          for (const { rule, where, why } of await findingsOfAxe(page)) {
            found.push(`${name}, ${theme}, ${width} px: ${rule} at ${where}: ${why}`);
          }
        }
      }
    }
    await wear(page, 'paper');
    await page.setViewportSize({ width: 1440, height: 1000 });
    expect(found).toEqual([]);
    expect(wide).toEqual([]);
  });

  it('has met no error of a script, of the console, or of the Content-Security-Policy until now', async () => {
    const answer = await page.request.get(server.url);
    expect(answer.headers()['content-security-policy']).toContain("script-src 'self'");
    expect(browser.complaints()).toEqual([]);
  });

  it('survives the death of the server: says so, comes back by itself, and has lost nothing', async () => {
    const before = await passages(server, BRIDGE, 2);
    const alarm = await settledOrAnswered(server);
    await page.goto(`${server.url}/live/${BRIDGE}`);
    await page.getByText('Measuring', { exact: true }).waitFor();
    await server.kill();
    expect(server.groupAlive()).toBe(false);
    await page.getByRole('alert').getByText('Connection lost').waitFor();
    await page.getByText('Not live', { exact: true }).first().waitFor();
    expect(await page.getByText('Measuring', { exact: true }).count()).toBe(0);

    server = await start();
    await page.getByRole('status').getByText('The server was started anew').waitFor();
    await page.getByText('Connection lost').waitFor({ state: 'detached' });
    await page.getByText('Measuring', { exact: true }).waitFor();
    browser.forgive(); // the browser tells of each try to connect meanwhile

    const after = await passages(server, BRIDGE, before.length);
    for (const { id, peak, f1Hz } of before) expect(after).toContainEqual(expect.objectContaining({ id, peak, f1Hz }));
    const kept = await ask<Alarm>(server, `/api/alarms/${encodeURIComponent(alarm.id)}`);
    expect(kept.acknowledged?.by).toBe('Duty engineer 7');
    await pressOn(page, page.getByRole('navigation').getByRole('link', { name: 'Passages' }));
    await page.locator(`a[href$="${before[0]!.id}"]`).first().waitFor();
    expect(browser.complaints()).toEqual([]);
  });
});

/** An alarm on a level whether or not it was answered meanwhile: the oldest of the bridge. */
async function settledOrAnswered(server: ServerProcess): Promise<Alarm> {
  const alarms = await ask<Alarm[]>(server, `/api/alarms?bridge=${BRIDGE}&which=all`);
  const levels = alarms.filter(({ kind, verdict }) => kind === 'level' && verdict !== null);
  return levels.toSorted((a, b) => a.raisedMicros - b.raisedMicros)[0]!;
}

async function expectText(locator: ReturnType<Page['locator']>, pattern: RegExp): Promise<void> {
  await until(`${String(pattern)} at ${locator.toString()}`, async () =>
    pattern.test((await locator.textContent()) ?? ''),
  );
}

/** How many colours the first canvas has: an empty one has a single one. */
function inkOf(page: Page): Promise<number> {
  return page.evaluate(() => {
    const canvas = document.querySelector<HTMLCanvasElement>('main canvas');
    const context = canvas?.getContext('2d');
    if (!canvas || !context) return 0;
    const { data } = context.getImageData(0, 0, canvas.width, canvas.height);
    return new Set(new Uint32Array(data.buffer)).size;
  });
}

/** Text of a PDF by poppler, null where that is not installed. */
function textOfPdf(file: string): string | null {
  if (!existsSync('/usr/bin/pdftotext')) return null;
  return execFileSync('/usr/bin/pdftotext', ['-layout', file, '-'], { encoding: 'utf8' });
}
