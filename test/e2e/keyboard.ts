import type { Locator, Page } from 'playwright-core';

/** More stops than any page has. */
const MOST_STOPS = 250;

/**
 * Goes to a control by Tab alone, as somebody without a mouse does.
 *
 * @throws where it cannot be reached, or a stop on the way does not show that it has the focus
 */
export async function tabTo(page: Page, target: Locator): Promise<void> {
  await target.first().waitFor();
  const unseen: string[] = [];
  for (let stop = 0; stop < MOST_STOPS; stop++) {
    if (await target.first().evaluate((element) => element === document.activeElement)) {
      if (unseen.length > 0) throw new Error(`the focus cannot be seen on ${unseen.join(', ')}`);
      return;
    }
    await page.keyboard.press('Tab');
    const blind = await page.evaluate(blindFocus);
    if (blind !== null) unseen.push(blind);
  }
  throw new Error(`Tab does not reach ${target.toString()} from ${page.url()}`);
}

/** Goes to a control by Tab and presses a key on it. */
export async function pressOn(page: Page, target: Locator, key = 'Enter'): Promise<void> {
  await tabTo(page, target);
  await page.keyboard.press(key);
}

/** What has the focus without showing it; null where it is shown, or lies with the page itself. Runs in the page. */
function blindFocus(): string | null {
  const element = document.activeElement;
  if (element === null || element === document.body) return null;
  const { outlineStyle, outlineWidth, boxShadow } = getComputedStyle(element);
  if ((outlineStyle !== 'none' && Number.parseFloat(outlineWidth) > 0) || boxShadow !== 'none') return null;
  // The skip link shows itself by coming into sight.
  if (element.matches('.skip')) return null;
  // Chromium marks the day, month or year inside a date field.
  if (element.matches('input[type=date]')) return null;
  return `${element.tagName.toLowerCase()} "${element.textContent.trim().slice(0, 40)}"`;
}
