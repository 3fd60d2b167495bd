import { untrack } from 'svelte';
import type { BridgeView } from '#core/contract/api.ts';
import { api } from './api.ts';
import { Asked } from './state.svelte.ts';
import { zoneOf } from './time.ts';

/** Definitions of bridges, each asked once and kept for all places; asked anew when the server runs anew. */
// eslint-disable-next-line svelte/prefer-svelte-reactivity -- each entry is reactive itself; which exist is of no interest
const kept = new Map<string, Asked<BridgeView>>();

/**
 * How many answers have come. A derived value does not follow state that was born in it, so what is asked for the first
 * time inside one is told of its answer by this count.
 */
class Answers {
  count = $state.raw(0);
}
const answers = new Answers();

export function viewOf(bridge: string): Asked<BridgeView> {
  const found = answers.count >= 0 ? kept.get(bridge) : undefined;
  if (found) return found;
  const asked = new Asked<BridgeView>();
  kept.set(bridge, asked);
  // Asking changes state, which a derived value that first needs the bridge may not do while it is computed.
  queueMicrotask(() => askAgain(bridge));
  return asked;
}

export function askAgain(bridge: string): void {
  const asked = untrack(() => kept.get(bridge));
  void asked?.ask((signal) => api.bridge(bridge, { signal })).then(() => (answers.count += 1));
}

export function askAllAgain(): void {
  for (const bridge of kept.keys()) askAgain(bridge);
}

/** IANA zone of a bridge; UTC until its definition is known. */
export function zoneOfBridge(bridge: string | null): string {
  if (bridge === null) return 'UTC';
  return zoneOf(viewOf(bridge).value?.definition.timeZone);
}
