import { SvelteURLSearchParams } from 'svelte/reactivity';
import { hrefOf, parsePath, type Query, type Route } from './router.ts';

/** Where the reader is: the browser's address as reactive state. Links are plain `<a href>`; this takes their clicks. */
class Address {
  route = $state.raw<Route>(parsePath(location.pathname));
  /** Read it with `get`; change it with `filter`. */
  query = $state.raw<URLSearchParams>(new SvelteURLSearchParams(location.search));

  /** Goes to a route as a new step of the history. */
  go(route: Route, query: Query = {}): void {
    this.open(hrefOf(route, query));
  }

  /** Changes filters of this place; an `undefined` takes one away. No new step unless asked. */
  filter(changes: Query, { step = false } = {}): void {
    const next: Record<string, string | number | undefined> = { ...Object.fromEntries(this.query), ...changes };
    this.open(hrefOf(this.route, next), !step);
  }

  /** Listens to clicks and to the back button until the returned function is called. */
  listen(): () => void {
    const back = (): void => this.#read();
    const click = (event: MouseEvent): void => this.#click(event);
    window.addEventListener('popstate', back);
    document.addEventListener('click', click);
    return () => {
      window.removeEventListener('popstate', back);
      document.removeEventListener('click', click);
    };
  }

  open(href: string, replace = false): void {
    if (href === location.pathname + location.search) return;
    const before = location.pathname;
    if (replace) history.replaceState(null, '', href);
    else history.pushState(null, '', href);
    this.#read();
    if (location.pathname !== before) {
      window.scrollTo(0, 0);
      // The new place is read from its title, as after a page load.
      requestAnimationFrame(() => document.getElementById('main')?.focus({ preventScroll: true }));
    }
  }

  #read(): void {
    this.route = parsePath(location.pathname);
    this.query = new SvelteURLSearchParams(location.search);
  }

  /** A plain click on a link into the program changes the place without loading the page. */
  #click(event: MouseEvent): void {
    if (event.defaultPrevented || event.button !== 0) return;
    if (event.metaKey || event.ctrlKey || event.shiftKey || event.altKey) return;
    const link = event.target instanceof Element ? event.target.closest('a[href]') : null;
    if (!(link instanceof HTMLAnchorElement) || link.target !== '' || link.hasAttribute('download')) return;
    if (link.origin !== location.origin || parsePath(link.pathname).place === 'nowhere') return;
    if (link.hash !== '' && link.pathname === location.pathname) return;
    event.preventDefault();
    this.open(link.pathname + link.search);
  }
}

export const address = new Address();
