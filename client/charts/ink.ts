/** Colours and type of the theme in force, for drawing on a canvas. */
export interface Ink {
  paper: string;
  film: string;
  tint: string;
  ink: string;
  ink2: string;
  ink3: string;
  rule: string;
  grid: string;
  edge: string;
  signal: string;
  select: string;
  narrow: string;
}

const TOKENS: Record<keyof Ink, string> = {
  paper: '--paper',
  film: '--film',
  tint: '--tint',
  ink: '--ink',
  ink2: '--ink-2',
  ink3: '--ink-3',
  rule: '--rule',
  grid: '--grid',
  edge: '--edge',
  signal: '--signal',
  select: '--select',
  narrow: '--narrow',
};

export function readInk(element: Element): Ink {
  const style = getComputedStyle(element);
  const read = (token: string): string => style.getPropertyValue(token).trim();
  return Object.fromEntries(Object.entries(TOKENS).map(([name, token]) => [name, read(token)])) as unknown as Ink;
}

/**
 * Calls back when the theme changes, by choice or with the system.
 *
 * @returns ends the watch
 */
export function onThemeChange(changed: () => void): () => void {
  const observer = new MutationObserver(changed);
  observer.observe(document.documentElement, { attributes: true, attributeFilter: ['data-theme'] });
  const dark = matchMedia('(prefers-color-scheme: dark)');
  dark.addEventListener('change', changed);
  return () => {
    observer.disconnect();
    dark.removeEventListener('change', changed);
  };
}
