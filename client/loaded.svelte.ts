import { untrack } from 'svelte';
import type { RequestFailed } from './api.ts';
import { Asked } from './state.svelte.ts';

/** What a request answered, kept on the page while the next one runs. */
export interface Loaded<T> {
  readonly value: T | null;
  /** Why the newest request has no answer. */
  readonly failed: RequestFailed | null;
  readonly busy: boolean;
  again(): void;
}

type Request<T> = (signal: AbortSignal) => Promise<T>;

interface Manner {
  /** Whether the old answer stays while the next request runs; false where it would be mistaken for the new one. */
  keep?: boolean;
  /** Reads whatever else should make it ask again. */
  when?: () => unknown;
}

/**
 * Asks whenever what `ask` reads changes.
 *
 * @param ask reads reactive values and returns the request, or null where there is nothing to ask for
 */
export function loaded<T>(ask: () => Request<T> | null, { keep = true, when }: Manner = {}): Loaded<T> {
  const asked = new Asked<T>();

  $effect(() => {
    when?.();
    const request = ask();
    if (!request || !keep) asked.clear();
    if (request) void asked.ask(request);
  });

  return {
    get value() {
      return asked.value;
    },
    get failed() {
      return asked.complaint;
    },
    get busy() {
      return asked.waiting;
    },
    again() {
      const request = untrack(ask);
      if (request) void asked.ask(request);
    },
  };
}
