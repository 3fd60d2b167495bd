import { readFileSync } from 'node:fs';
import { createRequire } from 'node:module';
import { chromium, type BrowserContext, type Page } from 'playwright-core';
import { programOf } from './debian.ts';
import { temporaryFolder } from './server.ts';

/** The system's Chromium with a profile of its own. */
export interface Browser {
  context: BrowserContext;
  page: Page;
  /** Complaints of all its pages: errors of scripts, of the console, and of the Content-Security-Policy. */
  complaints(): readonly string[];
  /** Forgets what was complained of so far, as while a server is away on purpose. */
  forgive(): void;
  close(): Promise<void>;
}

export interface BrowserOptions {
  width?: number;
  height?: number;
  theme?: Theme;
  reducedMotion?: boolean;
}

export type Theme = 'paper' | 'night';

const FLAGS = [
  '--no-sandbox',
  '--disable-gpu',
  '--disable-background-networking',
  '--disable-component-update',
  '--disable-sync',
  '--no-first-run',
];
/** What a person waits for may take long on a loaded machine. */
const LIMIT_MS = 60_000;

/** Opens Chromium without a window. The page's Content-Security-Policy stays in force. */
export async function openBrowser(options: BrowserOptions = {}): Promise<Browser> {
  const { width = 1440, height = 1000, theme = 'paper', reducedMotion = false } = options;
  const program = programOf('chromium');
  if (program === null) throw new Error('chromium is not installed');
  const profile = await temporaryFolder('browser');
  const context = await chromium.launchPersistentContext(profile.path, {
    executablePath: program,
    headless: true,
    args: FLAGS,
    viewport: { width, height },
    colorScheme: theme === 'night' ? 'dark' : 'light',
    reducedMotion: reducedMotion ? 'reduce' : 'no-preference',
    serviceWorkers: 'block',
  });
  context.setDefaultTimeout(LIMIT_MS);
  let complaints: string[] = [];
  const listen = (page: Page): void => {
    page.on('pageerror', (error) => complaints.push(`${page.url()}: ${error.message}`));
    page.on('response', (response) => {
      if (response.status() >= 400) complaints.push(`${page.url()}: ${response.status()} for ${response.url()}`);
    });
    page.on('console', (message) => {
      if (message.text().startsWith('Failed to load resource')) return; // told with its address above
      // Violations of the Content-Security-Policy are told on the console, too.
      if (message.type() === 'error' || message.type() === 'warning') {
        complaints.push(`${page.url()}: ${message.text()}`);
      }
    });
  };
  context.pages().forEach(listen);
  context.on('page', listen);
  const page = context.pages()[0] ?? (await context.newPage());
  return {
    context,
    page,
    complaints: () => complaints,
    forgive: () => {
      complaints = [];
    },
    async close() {
      await context.close();
      await profile.remove();
    },
  };
}

/** Paper or night, as a person's system asks for it. */
export async function wear(page: Page, theme: Theme): Promise<void> {
  await page.emulateMedia({ colorScheme: theme === 'night' ? 'dark' : 'light' });
  await page.waitForFunction((wanted) => document.documentElement.dataset['theme'] === wanted, theme);
}

/** What axe found wrong: rule, place and why, one line each. */
export interface AxeFinding {
  rule: string;
  impact: string;
  where: string;
  why: string;
}

const AXE_SOURCE = createRequire(import.meta.url).resolve('axe-core/axe.min.js');
/** WCAG 2.2 level A and AA. */
const AXE_TAGS = ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'wcag22aa'];

interface AxeResult {
  violations: { id: string; impact?: string; nodes: { target: unknown[]; failureSummary?: string }[] }[];
}

/** Looks at the page by axe. Its source goes in through the debugger, so that the page's policy may stay as it is. */
export async function findingsOfAxe(page: Page): Promise<AxeFinding[]> {
  const there = await page.evaluate(() => 'axe' in window);
  if (!there) await page.evaluate(readFileSync(AXE_SOURCE, 'utf8'));
  const { violations } = await page.evaluate(async (tags) => {
    const { axe } = window as unknown as { axe: { run(where: Document, how: object): Promise<AxeResult> } };
    return axe.run(document, { runOnly: { type: 'tag', values: tags }, resultTypes: ['violations'] });
  }, AXE_TAGS);
  return violations.flatMap(({ id, impact, nodes }) =>
    nodes.map(({ target, failureSummary }) => ({
      rule: id,
      impact: impact ?? 'not told',
      where: target.map(String).join(' '),
      why: (failureSummary ?? '').replace(/\s+/g, ' '),
    })),
  );
}

/** How many pixels the page can be scrolled sideways; a page that fits has none. */
export function sidewaysPx(page: Page): Promise<number> {
  return page.evaluate(() => {
    const { scrollWidth, clientWidth } = document.scrollingElement ?? document.documentElement;
    return scrollWidth - clientWidth;
  });
}
