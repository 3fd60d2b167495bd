import { mkdir } from 'node:fs/promises';
import { join, resolve } from 'node:path';
import { parseArgs } from 'node:util';
import { openBrowser, wear } from '../support/browser.ts';
import { ROOT, startServerProcess, temporaryFolder } from '../support/server.ts';
import { passages, placesOf, settledAlarm } from './places.ts';

/**
 * Starts the demonstration and takes a picture of each place, in both themes, wide and narrow, and prints one passage:
 *
 *   node test/e2e/screenshots.ts [--out FOLDER] [--past-days DAYS]
 */
const { values } = parseArgs({
  options: {
    out: { type: 'string', default: join(ROOT, '.spanbeat', 'screenshots') },
    'past-days': { type: 'string' },
  },
});
const out = resolve(values.out);
const BRIDGE = 'ottermere';
const WIDTHS = [
  { width: 1440, height: 1000 },
  { width: 390, height: 844 },
];

const data = await temporaryFolder('screenshots');
const server = await startServerProcess([
  'demo',
  ...['--port', '0', '--data', data.path, '--past-days', values['past-days'] ?? '0'],
]);
try {
  await mkdir(out, { recursive: true });
  tell('waiting for a passage and an alarm');
  const [first] = await passages(server, BRIDGE, 2);
  const alarm = await settledAlarm(server, BRIDGE);
  const places = placesOf(BRIDGE, alarm.passage ?? first!.id, alarm.id);
  const browser = await openBrowser();
  try {
    for (const size of WIDTHS) {
      for (const theme of ['paper', 'night'] as const) {
        for (const { name, path, drawn } of places) {
          await browser.page.setViewportSize(size);
          await browser.page.goto(server.url + path);
          await wear(browser.page, theme);
          await drawn(browser.page);
          await settled(browser.page);
          const file = join(out, `${name}-${theme}-${size.width}.png`);
          await browser.page.screenshot({ path: file, fullPage: true });
          tell(file);
        }
      }
    }
    await browser.page.setViewportSize(WIDTHS[0]!);
    const { path, drawn } = places.find(({ name }) => name === 'passage')!;
    await browser.page.goto(server.url + path);
    await drawn(browser.page);
    await browser.page.pdf({ path: join(out, 'passage-sheet.pdf'), preferCSSPageSize: true, printBackground: true });
    tell(join(out, 'passage-sheet.pdf'));
    for (const complaint of browser.complaints()) tell(`the page complained: ${complaint}`);
  } finally {
    await browser.close();
  }
} finally {
  await server.interrupt();
  await data.remove();
}

/** Fonts are there and the pictures had some frames to be drawn in. */
async function settled(page: Awaited<ReturnType<typeof openBrowser>>['page']): Promise<void> {
  await page.evaluate(async () => {
    await document.fonts.ready;
    for (let frame = 0; frame < 30; frame++) await new Promise((resolve) => requestAnimationFrame(resolve));
  });
}

function tell(line: string): void {
  process.stderr.write(`${line}\n`);
}
