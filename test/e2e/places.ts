import type { Page } from 'playwright-core';
import type { Alarm } from '#core/contract/alarm.ts';
import type { PassagePage, PassageRow } from '#core/contract/api.ts';
import { ask, until } from '../support/server.ts';

/** One screen of the program, and what must be on it before it counts as drawn. */
export interface PlaceOnScreen {
  name: 'network' | 'live' | 'passages' | 'passage' | 'alarms' | 'bridges';
  path: string;
  drawn: (page: Page) => Promise<unknown>;
}

/** All places of a bridge that has had a passage and an alarm. */
export function placesOf(bridge: string, passage: string, alarm: string): PlaceOnScreen[] {
  const heading = (name: string) => (page: Page) => page.getByRole('heading', { name, exact: true }).first().waitFor();
  return [
    {
      name: 'network',
      path: '/',
      drawn: (page) => page.getByRole('article', { name: 'Ottermere Trough' }).getByText('today').first().waitFor(),
    },
    {
      name: 'live',
      path: `/live/${bridge}`,
      drawn: async (page) => {
        await heading('Last passage')(page);
        await page.getByRole('link', { name: 'Open passage' }).waitFor();
        await heading('Today')(page);
        await page.locator('main canvas').first().waitFor();
      },
    },
    {
      name: 'passages',
      path: `/passages/${bridge}`,
      drawn: (page) =>
        page
          .getByRole('checkbox', { name: /^Compare the passage/ })
          .first()
          .waitFor(),
    },
    {
      name: 'passage',
      path: `/passage/${passage}`,
      drawn: async (page) => {
        await heading('Measures')(page);
        await page.locator('main canvas, main svg').first().waitFor();
        await heading('Record section')(page);
      },
    },
    { name: 'alarms', path: `/alarms/${alarm}`, drawn: heading('Instruction of this site') },
    { name: 'bridges', path: `/bridges/${bridge}`, drawn: heading('Spans') },
  ];
}

/** The first passages of a bridge, oldest first, when there are as many. */
export function passages(server: { url: string }, bridge: string, count = 1): Promise<PassageRow[]> {
  return until(`${count} passages of ${bridge}`, async () => {
    const page = await ask<PassagePage>(server, `/api/passages?bridge=${bridge}&order=time`);
    return page.rows.length >= count && page.rows.toReversed();
  });
}

/** The first alarm on a level that the record of its passage has settled. */
export function settledAlarm(server: { url: string }, bridge: string): Promise<Alarm> {
  return until(`an alarm of ${bridge}`, async () => {
    const alarms = await ask<Alarm[]>(server, `/api/alarms?bridge=${bridge}&which=all`);
    return alarms.find(({ kind, verdict, state }) => kind === 'level' && verdict !== null && state !== 'normal');
  });
}
