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

/**
 * Asks whenever what `ask` reads changes.
 *
 * @param ask reads reactive values and returns the request, or null where there is nothing to ask for
 * @param keep whether the old answer stays while the next request runs; false where it would be mistaken for the new one
 */
export function loaded<T>(ask: () => ((signal: AbortSignal) => Promise<T>) | null, keep = true): Loaded<T> {
  const asked = new Asked<T>();
  let attempt = $state(0);

  $effect(() => {
    void attempt;
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
      attempt++;
    },
  };
}
