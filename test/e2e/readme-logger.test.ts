import { readFile, rm } from 'node:fs/promises';
import { connect } from 'node:net';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { openBrowser, type Browser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { ask, ROOT, until } from '../support/server.ts';
import { openTerminal, type Terminal } from '../support/terminal.ts';
import { passages } from './places.ts';

const LIMIT_MS = 300_000;
/** As the example in the README names them. */
const PAGE = { url: 'http://127.0.0.1:8610' };
const PORTS = [8610, 18830];
const FOLDER = join(ROOT, '.spanbeat', 'example');

const able = available('chromium') && available('mosquitto') && available('mosquitto-clients');

describe.skipIf(!able)("the README's example of a logger, typed as it stands", { timeout: LIMIT_MS }, () => {
  let terminal: Terminal;
  let browser: Browser;
  let blocks: string[];

  /** What was begun, to be ended in the opposite order, however far it came. */
  const begun: (() => Promise<unknown>)[] = [];
  beforeAll(async () => {
    await rm(FOLDER, { recursive: true, force: true });
    begun.push(() => rm(FOLDER, { recursive: true, force: true }));
    blocks = blocksOf(await readFile(join(ROOT, 'README.md'), 'utf8'));
    terminal = openTerminal(ROOT);
    begun.push(() => terminal.close());
    browser = await openBrowser();
    begun.push(() => browser.close());
  }, LIMIT_MS);

  afterAll(async () => {
    for (const undo of begun.reverse()) await undo();
  }, LIMIT_MS);

  /** Types the blocks up to and with the one that holds the words. */
  const upTo = async (words: string): Promise<void> => {
    const index = blocks.findIndex((block) => block.includes(words));
    expect(index, `a block with "${words}"`).toBeGreaterThanOrEqual(0);
    for (const block of blocks.splice(0, index + 1)) await terminal.type(block);
  };

  it('starts a broker and a server that says on its page that it waits for the logger', async () => {
    await upTo('npm start');
    // As a person waits for the address before going on.
    await until('the page', () => ask(PAGE, '/api/status'), LIMIT_MS);
    await browser.page.goto(`${PAGE.url}/live/example`);
    await browser.page
      .getByText(/^No data yet/)
      .first()
      .waitFor();
    expect(await browser.page.getByText('Measuring', { exact: true }).count()).toBe(0);
  });

  it('shows the value that mosquitto_pub sent', async () => {
    await upTo('mosquitto_pub');
    await browser.page
      .getByText(/T1 14\.2\b/)
      .first()
      .waitFor();
  });

  it('records the passage that was published line by line', async () => {
    await upTo('simulate');
    const [passage] = await passages(PAGE, 'example');
    expect(passage).toMatchObject({ bridge: 'example', axles: 12, quality: 'good' });
    expect(passage!.peak).toBeGreaterThan(0.1);
    const last = browser.page.getByRole('region', { name: 'Last passage' });
    await last.getByText('12 axles', { exact: true }).waitFor();
    expect(browser.complaints()).toEqual([]);
  });

  it('says that there is no data once the logger is silent, and never that it measures', async () => {
    await browser.page
      .getByText(/^No data: monitoring has stopped/)
      .first()
      .waitFor();
    expect(await browser.page.getByText('Measuring', { exact: true }).count()).toBe(0);
    await browser.page.getByRole('link', { name: /Unanswered alarms.*[1-9]/ }).waitFor();
  });

  it('ends what it started', async () => {
    await browser.page.goto('about:blank');
    await upTo('kill');
    expect(blocks).toEqual([]);
    for (const port of PORTS) await until(`port ${port} to be free`, async () => !(await answers(port)));
  });
});

/** The fenced blocks between the marks, in their order. */
function blocksOf(readme: string): string[] {
  const example = /<!-- logger example: begin -->([\s\S]*?)<!-- logger example: end -->/.exec(readme)?.[1] ?? '';
  return [...example.matchAll(/^```(?:sh|bash)\n([\s\S]*?)^```$/gm)].map(([, block]) => block!);
}

function answers(port: number): Promise<boolean> {
  return new Promise((resolve) => {
    const socket = connect(port, '127.0.0.1');
    socket.once('connect', () => {
      socket.destroy();
      resolve(true);
    });
    socket.once('error', () => resolve(false));
  });
}
