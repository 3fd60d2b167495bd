import { setTimeout as sleep } from 'node:timers/promises';
import { openBrowser, type Browser } from '../support/browser.ts';
import { available } from '../support/debian.ts';
import { freePort } from '../support/mosquitto.ts';
import { startServerProcess, temporaryFolder } from '../support/server.ts';
import { quantile, type Figure } from './figure.ts';

const BRIDGE = 'ottermere';
const STARTS = 5;
/** The first start runs so long: a train has crossed, and there is a journal and a history to come back to. */
const FIRST_SECONDS = 45;

interface Start {
  addressMs: number;
  drawnMs: number;
  sampleMs: number;
}

/** `npm run demo` again over what an earlier start left, to the first live sample in a browser that is open already. */
export async function benchStart(): Promise<Figure[]> {
  if (!available('chromium')) return [{ what: 'Chromium is not on this machine', value: NaN, unit: '' }];
  const data = await temporaryFolder('bench-start');
  const browser = await openBrowser();
  try {
    await startOnce(browser, data.path, FIRST_SECONDS);
    const starts: Start[] = [];
    for (let i = 0; i < STARTS; i++) starts.push(await startOnce(browser, data.path, 3));
    const median = (of: (start: Start) => number): number => quantile(starts.map(of), 0.5) / 1000;
    return [
      {
        what: `npm run demo, second start, address on the terminal, median of ${STARTS}`,
        value: median((s) => s.addressMs),
        unit: 's',
      },
      { what: 'the page is drawn', value: median((s) => s.drawnMs), unit: 's' },
      { what: 'first live sample on the page', value: median((s) => s.sampleMs), unit: 's', aim: '<= 6' },
      {
        what: 'the slowest of them',
        value:
          quantile(
            starts.map((s) => s.sampleMs),
            1,
          ) / 1000,
        unit: 's',
        aim: '<= 6',
      },
    ];
  } finally {
    await browser.close();
    await data.remove();
  }
}

async function startOnce({ page }: Browser, data: string, stayS: number): Promise<Start> {
  const begunMs = performance.now();
  const words = ['--port', String(await freePort()), '--data', data, '--past-days', '0'];
  const server = await startServerProcess(words, ['npm', 'run', 'demo', '--']);
  try {
    const addressMs = performance.now() - begunMs;
    await page.goto(`${server.url}/live/${BRIDGE}`);
    await page.getByRole('heading', { name: 'Long section' }).waitFor();
    const drawnMs = performance.now() - begunMs;
    const row = page.getByRole('table', { name: /^Deck acceleration/ }).getByRole('row', { name: /^A3/ });
    await row
      .getByText(/^0\.\d+$/)
      .first()
      .waitFor();
    const sampleMs = performance.now() - begunMs;
    await sleep(stayS * 1000);
    await page.goto('about:blank');
    return { addressMs, drawnMs, sampleMs };
  } finally {
    await server.interrupt();
  }
}
